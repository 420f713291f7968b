//! Estimates with their intervals, and what the reader must be warned of.

/// A central interval at a stated level.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Interval {
    /// Coverage aimed at, in (0, 1).
    pub level: f64,
    /// Lower end.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

/// A point estimate; without an interval when it was given by the caller or the data cannot bound it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Estimate {
    /// The point estimate.
    pub value: f64,
    /// Its interval, if there is one.
    pub interval: Option<Interval>,
}

impl Estimate {
    /// A value taken as given: no interval.
    pub fn given(value: f64) -> Self {
        Self { value, interval: None }
    }
}

/// Something the reader must know before acting on an answer.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Warning {
    /// Stable snake_case name.
    pub code: &'static str,
    /// What was seen, in words, with its figures.
    pub detail: String,
}

impl Warning {
    /// A warning with a stable code and its explanation.
    pub fn new(code: &'static str, detail: impl Into<String>) -> Self {
        Self { code, detail: detail.into() }
    }
}

//! What is asked of a forecast: thresholds, dates and interval levels.

use std::fmt;

use jiff::Timestamp;

use super::{MAX_DEGREE, days_between};

/// Most thresholds in one forecast.
const MAX_THRESHOLDS: usize = 1_000;
/// Most dates in one forecast.
const MAX_DATES: usize = 4_000;
/// Most interval levels in one forecast.
const MAX_LEVELS: usize = 20;
/// Widest interval level: beyond it two moments and a fitted law say nothing.
const MAX_LEVEL: f64 = 0.9999;
/// Farthest a forecast may reach, days: two centuries.
const MAX_HORIZON_DAYS: f64 = 73_050.0;

/// Hub thresholds: ascending, distinct, each from 1 to 2^53 − 1.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Thresholds(Vec<u64>);

/// Interval levels: ascending, distinct, each above 0 and at most 0.9999.
#[derive(Debug, Clone, PartialEq)]
pub struct Levels(Vec<f64>);

/// Thresholds, dates and levels of one forecast; dates are ascending and after the last snapshot.
#[derive(Debug, Clone, PartialEq)]
pub struct ForecastPlan {
    thresholds: Thresholds,
    levels: Levels,
    dates: Vec<Timestamp>,
    days: Vec<f64>,
}

/// What is wrong with a plan: the list at fault, the index within it, and how to mend it.
#[derive(Debug, Clone, PartialEq)]
pub struct PlanFault {
    /// `thresholds`, `dates` or `levels`.
    pub field: &'static str,
    /// Index of the offending item; `None` for the whole list.
    pub index: Option<usize>,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for PlanFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

fn length_faults(field: &'static str, length: usize, most: usize) -> Vec<PlanFault> {
    let detail = match length {
        0 => format!("{field} is empty; give at least one"),
        n if n > most => {
            format!("{n} {field} are more than the {most} one forecast answers; split the request")
        }
        _ => return Vec::new(),
    };
    vec![PlanFault { field, index: None, detail }]
}

impl Thresholds {
    /// Sorts the thresholds and drops repeats.
    ///
    /// # Errors
    /// Every threshold that is 0 or above 2^53 − 1; an empty or too long list.
    pub fn new(values: &[u64]) -> Result<Self, Vec<PlanFault>> {
        let field = "thresholds";
        let mut faults = length_faults(field, values.len(), MAX_THRESHOLDS);
        for (i, &threshold) in values.iter().enumerate() {
            if threshold == 0 || threshold > MAX_DEGREE {
                let detail = format!(
                    "threshold {threshold} is not between 1 and {MAX_DEGREE}; every node has at least 0 links, so the \
                     smallest threshold that tells anything is 1"
                );
                faults.push(PlanFault { field, index: Some(i), detail });
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        let mut sorted = values.to_vec();
        sorted.sort_unstable();
        sorted.dedup();
        Ok(Self(sorted))
    }

    /// The thresholds, ascending.
    pub fn values(&self) -> &[u64] {
        &self.0
    }
}

impl Levels {
    /// Sorts the levels and drops repeats.
    ///
    /// # Errors
    /// Every level that is not above 0 and at most 0.9999; an empty or too long list.
    pub fn new(values: &[f64]) -> Result<Self, Vec<PlanFault>> {
        let field = "levels";
        let mut faults = length_faults(field, values.len(), MAX_LEVELS);
        for (i, &level) in values.iter().enumerate() {
            if !(level > 0.0 && level <= MAX_LEVEL) {
                let detail = format!("level {level} is not above 0 and at most {MAX_LEVEL}; write 0.9 for 90 %");
                faults.push(PlanFault { field, index: Some(i), detail });
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        let mut sorted = values.to_vec();
        sorted.sort_by(f64::total_cmp);
        sorted.dedup();
        Ok(Self(sorted))
    }

    /// The levels, ascending.
    pub fn values(&self) -> &[f64] {
        &self.0
    }
}

impl Default for Levels {
    /// 50 % and 90 %.
    fn default() -> Self {
        Self(vec![0.5, 0.9])
    }
}

impl ForecastPlan {
    /// A plan for `dates` after `as_of`, the date of the last snapshot; dates are sorted and repeats dropped.
    ///
    /// # Errors
    /// Every date at or before `as_of` or beyond two centuries; an empty or too long list.
    pub fn new(
        as_of: Timestamp,
        thresholds: Thresholds,
        dates: &[Timestamp],
        levels: Levels,
    ) -> Result<Self, Vec<PlanFault>> {
        let field = "dates";
        let mut faults = length_faults(field, dates.len(), MAX_DATES);
        for (i, &date) in dates.iter().enumerate() {
            let days = days_between(as_of, date);
            if days <= 0.0 {
                let detail = format!("{date} is not after the last snapshot ({as_of}); a forecast needs a later date");
                faults.push(PlanFault { field, index: Some(i), detail });
            } else if days > MAX_HORIZON_DAYS {
                let detail = format!("{date} is more than {MAX_HORIZON_DAYS} days after the last snapshot");
                faults.push(PlanFault { field, index: Some(i), detail });
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        let mut dates = dates.to_vec();
        dates.sort_unstable();
        dates.dedup();
        let days = dates.iter().map(|&date| days_between(as_of, date)).collect();
        Ok(Self { thresholds, levels, dates, days })
    }

    /// Hub thresholds, ascending.
    pub fn thresholds(&self) -> &[u64] {
        self.thresholds.values()
    }

    /// Interval levels, ascending.
    pub fn levels(&self) -> &[f64] {
        self.levels.values()
    }

    /// Dates, ascending.
    pub fn dates(&self) -> &[Timestamp] {
        &self.dates
    }

    /// Days from the last snapshot to each date, ascending, above 0.
    pub fn days(&self) -> &[f64] {
        &self.days
    }
}

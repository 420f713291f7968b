//! Forecasts nodes, links, tail sizes and the largest degree at future dates, with intervals.

mod counts;
mod horizon;
mod largest;

pub use counts::CountLaw;
pub use horizon::{Excursion, Scenario, forecast, forecast_totals};

use jiff::Timestamp;

use crate::growth::GrowthError;
use crate::model::Interval;

/// A forecast count: its expectation, median and central intervals.
#[derive(Debug, Clone, PartialEq)]
pub struct CountForecast {
    /// The count at the last snapshot.
    pub now: f64,
    /// Expected value.
    pub expected: f64,
    /// Median.
    pub median: f64,
    /// Central intervals, ascending in level.
    pub intervals: Vec<Interval>,
}

/// A forecast degree: its median and central intervals. A power-law tail may leave it without a finite expectation.
#[derive(Debug, Clone, PartialEq)]
pub struct DegreeForecast {
    /// The degree at the last snapshot.
    pub now: f64,
    /// Median.
    pub median: f64,
    /// Central intervals, ascending in level.
    pub intervals: Vec<Interval>,
}

/// Forecast tail size S_j: hubs with at least `threshold` links.
#[derive(Debug, Clone, PartialEq)]
pub struct TailForecast {
    /// Threshold j.
    pub threshold: u64,
    /// The tail size.
    pub size: CountForecast,
}

/// The forecast at one date.
#[derive(Debug, Clone, PartialEq)]
pub struct DateForecast {
    /// The date.
    pub date: Timestamp,
    /// Number of nodes N.
    pub nodes: CountForecast,
    /// Number of link ends K.
    pub links: CountForecast,
    /// Largest degree of any node.
    pub largest_degree: DegreeForecast,
    /// Tail sizes, one a threshold, ascending.
    pub tail: Vec<TailForecast>,
}

/// Why no forecast can be given.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ForecastError {
    /// Growth to a date cannot be computed.
    #[error(transparent)]
    Growth(#[from] GrowthError),
    /// The caller asked to stop.
    #[error("the forecast was cancelled")]
    Cancelled,
}

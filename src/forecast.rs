//! Forecasts nodes, links, tail sizes and the largest degree at future dates, with intervals.

mod counts;
mod horizon;
mod largest;
mod ranks;

pub use counts::CountLaw;
pub(crate) use counts::first_whole;
pub use horizon::{Excursion, Scenario, forecast, forecast_totals, tail_laws};
pub use ranks::RankLaw;

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

/// The law of a forecast tail size.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TailLaw {
    /// Threshold j.
    pub threshold: u64,
    /// The tail size at the last snapshot.
    pub now: f64,
    /// Its law, everything that is uncertain included.
    pub law: CountLaw,
    /// The part of its variance that chance alone makes, were the forces known.
    pub chance: f64,
}

impl TailLaw {
    /// Expected tail size.
    pub fn mean(&self) -> f64 {
        self.law.floor() + self.law.rest().mean
    }

    /// Standard deviation of the tail's expectation: what is not known of the forces.
    pub fn doubt(&self) -> f64 {
        (self.law.rest().variance - self.chance).max(0.0).sqrt()
    }

    /// The same tail, larger by a factor; `falls` where its nodes may leave it.
    ///
    /// Formula: a tail made smaller, or whose nodes may leave, keeps each of its nodes with the factor as probability, and nothing of it
    /// is certain.
    pub fn scaled(&self, factor: f64, falls: bool) -> Self {
        let (rest, doubt) = (self.law.rest(), self.doubt() * factor);
        let mean = self.mean() * factor;
        let floor = self.law.floor();
        if falls || mean < floor {
            let kept = factor.min(1.0);
            let chance = factor * factor * self.chance + kept * (1.0 - kept) * self.mean();
            return Self { law: self.law.with_moments(0.0, mean, chance + doubt * doubt), chance, ..*self };
        }
        let chance = self.chance * if rest.mean > 0.0 { (mean - floor) / rest.mean } else { factor };
        let law = self.law.with_moments(floor, mean - floor, chance + doubt * doubt);
        Self { law, chance, ..*self }
    }

    /// Its middle and intervals.
    pub fn forecast(&self, levels: &[f64]) -> TailForecast {
        let size = CountForecast {
            now: self.now,
            expected: self.mean(),
            median: self.law.quantile(0.5),
            intervals: self.law.intervals(levels),
        };
        TailForecast { threshold: self.threshold, size }
    }
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
    Growth(GrowthError),
    /// The caller asked to stop.
    #[error("the forecast was cancelled")]
    Cancelled,
}

impl From<GrowthError> for ForecastError {
    fn from(error: GrowthError) -> Self {
        if error == GrowthError::Cancelled { Self::Cancelled } else { Self::Growth(error) }
    }
}

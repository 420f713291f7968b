//! The law of the largest degree.

use super::counts::{first_whole, normal_quantile};
use super::{DegreeForecast, ForecastError};
use crate::growth::{GrowthError, NetworkLaw};
use crate::model::{DegreeCounts, Interval, MAX_DEGREE};
use crate::numerics::tolerances::Accuracy;

/// Forecasts the largest degree of a network with law `law`.
///
/// Formula: `P(max < j) = Π_k (1 − P(k → ≥ j))^{n_k} · e^{−newcomers past j}`. Its quantiles under the central forces are
/// widened, on the scale of ln(degree), by `spread`: the standard deviation of ln(median) from everything else that is
/// uncertain.
pub(super) fn largest_degree(
    law: &NetworkLaw,
    range: &DegreeRange,
    levels: &[f64],
    spread: f64,
    cancelled: &dyn Fn() -> bool,
) -> Result<DegreeForecast, ForecastError> {
    let median = range.quantile(law, 0.5)?;
    let widened = |probability: f64| -> Result<f64, ForecastError> {
        if cancelled() {
            return Err(ForecastError::Cancelled);
        }
        let own = (range.quantile(law, probability)?.ln_1p() - median.ln_1p()).abs();
        let beyond = normal_quantile(probability).abs() * spread;
        let side = if probability < 0.5 { -1.0 } else { 1.0 };
        Ok((median.ln_1p() + side * own.hypot(beyond)).exp_m1().round().max(range.least))
    };
    let interval = |&level: &f64| -> Result<Interval, ForecastError> {
        Ok(Interval { level, low: widened(0.5 - 0.5 * level)?, high: widened(0.5 + 0.5 * level)? })
    };
    let intervals = levels.iter().map(interval).collect::<Result<_, _>>()?;
    Ok(DegreeForecast { now: range.now, median, intervals })
}

/// Where the largest degree stands today and how far it can fall.
pub(super) struct DegreeRange {
    now: f64,
    least: f64,
}

impl DegreeRange {
    /// Of a network with `counts` today; degrees fall only where nodes leave or links are lost.
    pub fn of(counts: &DegreeCounts, has_losses: bool) -> Self {
        let now = counts.largest() as f64;
        Self { now, least: if has_losses { 0.0 } else { now } }
    }

    /// Smallest x with P(max ≤ x) ≥ `probability`.
    pub fn quantile(&self, law: &NetworkLaw, probability: f64) -> Result<f64, ForecastError> {
        let wanted = probability.ln();
        let mut failure: Option<GrowthError> = None;
        let mut excess = |x: f64| match law.tail(x as u64 + 1, Accuracy::Working) {
            Ok(sum) => sum.log_none.max(-1e300) - wanted,
            Err(error) => {
                failure.get_or_insert(error);
                0.0
            }
        };
        let mut reach = 2.0 * self.least.max(8.0);
        while excess(reach) < 0.0 && reach < MAX_DEGREE as f64 / 2.0 {
            reach *= 2.0;
        }
        let found = first_whole(self.least, reach, excess);
        failure.map_or(Ok(found), |error| Err(error.into()))
    }
}

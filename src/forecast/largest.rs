//! The law of the largest degree.

use super::counts::{first_whole, normal_quantile};
use super::{DegreeForecast, ForecastError};
use crate::growth::{Course, GrowthError, tail_sum};
use crate::model::{DegreeCounts, Interval, MAX_DEGREE};
use crate::numerics::tolerances::Accuracy;

/// Forecasts the largest degree at `day`.
///
/// Formula: `P(max < j) = Π_k (1 − P(k → ≥ j))^{n_k} · e^{−newcomers past j}`. Its quantiles under the central forces are
/// widened, on the scale of ln(degree), by `spread`: the standard deviation of ln(median) from everything else that is
/// uncertain.
pub(super) fn largest_degree(
    course: &Course,
    counts: &DegreeCounts,
    day: f64,
    levels: &[f64],
    spread: f64,
    cancelled: &dyn Fn() -> bool,
) -> Result<DegreeForecast, ForecastError> {
    let median = quantile(course, counts, day, 0.5)?;
    let now = counts.largest() as f64;
    let least = if course.parameters().has_losses() { 0.0 } else { now };
    let widened = |probability: f64| -> Result<f64, ForecastError> {
        if cancelled() {
            return Err(ForecastError::Cancelled);
        }
        let own = (quantile(course, counts, day, probability)?.ln_1p() - median.ln_1p()).abs();
        let beyond = normal_quantile(probability).abs() * spread;
        let side = if probability < 0.5 { -1.0 } else { 1.0 };
        Ok((median.ln_1p() + side * own.hypot(beyond)).exp_m1().round().max(least))
    };
    let interval = |&level: &f64| -> Result<Interval, ForecastError> {
        Ok(Interval { level, low: widened(0.5 - 0.5 * level)?, high: widened(0.5 + 0.5 * level)? })
    };
    let intervals = levels.iter().map(interval).collect::<Result<_, _>>()?;
    Ok(DegreeForecast { now, median, intervals })
}

/// Smallest x with P(max ≤ x) ≥ `probability`.
pub(super) fn quantile(
    course: &Course,
    counts: &DegreeCounts,
    day: f64,
    probability: f64,
) -> Result<f64, ForecastError> {
    let wanted = probability.ln();
    let mut failure: Option<GrowthError> = None;
    let mut excess = |x: f64| match tail_sum(course, counts, day, x as u64 + 1, Accuracy::Working) {
        Ok(sum) => sum.log_none.max(-1e300) - wanted,
        Err(error) => {
            failure.get_or_insert(error);
            0.0
        }
    };
    let least = if course.parameters().has_losses() { 0.0 } else { counts.largest() as f64 };
    let mut reach = 2.0 * least.max(8.0);
    while excess(reach) < 0.0 && reach < MAX_DEGREE as f64 / 2.0 {
        reach *= 2.0;
    }
    let found = first_whole(least, reach, excess);
    failure.map_or(Ok(found), |error| Err(error.into()))
}

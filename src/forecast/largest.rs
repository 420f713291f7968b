//! The law of the largest degree.

use super::counts::first_whole;
use super::{DegreeForecast, ForecastError};
use crate::growth::{GrowthError, NetworkLaw, TailSum};
use crate::model::{DegreeCounts, Interval, MAX_DEGREE};
use crate::numerics::elementary::normal_quantile;
use crate::numerics::tolerances::Accuracy;

/// Forecasts the largest degree of a network with law `law`.
///
/// Formula: `P(max < j) = Π_k (1 − P(k → ≥ j))^{n_k} · e^{−newcomers past j}`. Its quantiles under the central forces are
/// widened, on the scale of ln(degree), by `spread`: the standard deviation of ln(median) from everything else that is
/// uncertain.
pub(super) fn largest_degree(
    law: &NetworkLaw,
    range: &DegreeRange,
    median: f64,
    levels: &[f64],
    spread: f64,
    cancelled: &dyn Fn() -> bool,
) -> Result<DegreeForecast, ForecastError> {
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

/// ln of a probability that is none.
const NOBODY: f64 = -1e300;
/// Relative step of a difference quotient in degree.
const SLOPE_STEP: f64 = 1.03;
/// Exact tails taken to correct a quantile that rough tails found.
const POLISHING_STEPS: usize = 2;
/// A first-order shift of ln(degree) beyond this is not believed.
const FARTHEST_SHIFT: f64 = 1.5;

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
        let exact = |x: f64| law.tail(x as u64 + 1, Accuracy::Working);
        if !law.has_rough_tail() {
            return self.search(probability, exact);
        }
        // Search by rough tails, then correct by the exact tail at the place found, along the rough slope.
        let mut found = self.search(probability, |x| law.rough_tail(x as u64 + 1))?;
        for _ in 0..POLISHING_STEPS {
            let slope = slope(law, found)?;
            let step = (exact(found)?.log_none.max(NOBODY) - probability.ln()) / slope;
            if !step.is_finite() {
                break;
            }
            found = (found.ln_1p() - step.clamp(-1.0, 1.0)).exp_m1().round().max(self.least);
        }
        Ok(found)
    }

    /// How far ln(median) moves under other forces than those of `central`, whose median is `median`: to first order.
    pub fn shift(
        &self,
        central: &NetworkLaw,
        median: f64,
    ) -> Result<impl FnMut(&NetworkLaw) -> Result<f64, ForecastError> + use<>, ForecastError> {
        let (slope, least) = (slope(central, median)?, self.least);
        Ok(move |law: &NetworkLaw| {
            let step = (law.rough_tail(median as u64 + 1)?.log_none.max(NOBODY) - 0.5_f64.ln()) / slope;
            let moved = if step.is_finite() {
                (median.ln_1p() - step.clamp(-FARTHEST_SHIFT, FARTHEST_SHIFT)).exp_m1()
            } else {
                median
            };
            Ok(moved.max(least).ln_1p())
        })
    }

    fn search(
        &self,
        probability: f64,
        tail: impl Fn(f64) -> Result<TailSum, GrowthError>,
    ) -> Result<f64, ForecastError> {
        let wanted = probability.ln();
        let mut failure: Option<GrowthError> = None;
        let mut excess = |x: f64| match tail(x) {
            Ok(sum) => sum.log_none.max(NOBODY) - wanted,
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

/// d ln P(max ≤ x)/d ln(1 + x) about x, by rough tails.
fn slope(law: &NetworkLaw, x: f64) -> Result<f64, ForecastError> {
    let higher = (x * SLOPE_STEP).max(x + 1.0).round();
    let at = |x: f64| Ok::<_, ForecastError>(law.rough_tail(x as u64 + 1)?.log_none.max(NOBODY));
    Ok((at(higher)? - at(x)?) / (higher.ln_1p() - x.ln_1p()))
}

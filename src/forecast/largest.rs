//! The law of the largest degree.

use super::{DegreeForecast, ForecastError};
use crate::growth::NetworkLaw;
use crate::model::{DegreeCounts, Interval, MAX_DEGREE};
use crate::numerics::elementary::normal_quantile;
use crate::numerics::tolerances::Accuracy;

/// Forecasts the largest degree of a network with the law of `largest`, whose median is `median`.
///
/// Formula: `P(max < j) = Π_k (1 − P(k → ≥ j))^{n_k} · e^{−newcomers past j}`. Its quantiles under the central forces are
/// widened, on the scale of ln(degree), by `spread`: the standard deviation of ln(median) from everything else that is
/// uncertain.
pub(super) fn largest_degree(
    largest: &mut LargestLaw,
    median: f64,
    levels: &[f64],
    spread: f64,
    cancelled: &dyn Fn() -> bool,
) -> Result<DegreeForecast, ForecastError> {
    let least = largest.range.least;
    let mut widened = |probability: f64| -> Result<f64, ForecastError> {
        if cancelled() {
            return Err(ForecastError::Cancelled);
        }
        let own = (largest.quantile(probability)?.ln_1p() - median.ln_1p()).abs();
        let beyond = normal_quantile(probability).abs() * spread;
        let side = if probability < 0.5 { -1.0 } else { 1.0 };
        Ok((median.ln_1p() + side * own.hypot(beyond)).exp_m1().round().max(least))
    };
    let interval = |&level: &f64| -> Result<Interval, ForecastError> {
        Ok(Interval { level, low: widened(0.5 - 0.5 * level)?, high: widened(0.5 + 0.5 * level)? })
    };
    let intervals = levels.iter().map(interval).collect::<Result<_, _>>()?;
    Ok(DegreeForecast { now: largest.range.now, median, intervals })
}

/// ln of a probability that is none.
const NOBODY: f64 = -1e300;
/// Relative step of a difference quotient in degree.
const SLOPE_STEP: f64 = 1.03;
/// A quantile is settled to this, relative, or to the unit.
const SETTLED: f64 = 1e-5;
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
}

/// Where the largest degree of one law stands, with every probability found so far: each narrows the search for the next quantile.
pub(super) struct LargestLaw<'a> {
    law: &'a NetworkLaw<'a>,
    range: &'a DegreeRange,
    /// (x, −ln(−ln P(max ≤ x))) in ascending x, by rough tails where they are cheaper.
    found: Vec<(f64, f64)>,
}

impl<'a> LargestLaw<'a> {
    pub fn new(law: &'a NetworkLaw<'a>, range: &'a DegreeRange) -> Self {
        Self { law, range, found: Vec::new() }
    }

    /// Smallest x with P(max ≤ x) ≥ `probability`, to the unit, or to 10⁻⁵ relative where that is more.
    pub fn quantile(&mut self, probability: f64) -> Result<f64, ForecastError> {
        let mut found = self.search(gumbel(probability.ln()))?;
        if !self.law.has_rough_tail() {
            return Ok(found);
        }
        // Found by rough tails: correct by the exact tail there, along the rough slope.
        for _ in 0..POLISHING_STEPS {
            let slope = slope(self.law, found)?;
            let exact = self.law.tail(found as u64 + 1, Accuracy::Working)?.log_none.max(NOBODY);
            let step = (exact - probability.ln()) / slope;
            if !step.is_finite() {
                break;
            }
            found = (found.ln_1p() - step.clamp(-1.0, 1.0)).exp_m1().round().max(self.range.least);
        }
        Ok(found)
    }

    /// Smallest whole x at which the height reaches `wanted`.
    fn search(&mut self, wanted: f64) -> Result<f64, ForecastError> {
        const MOST_DEGREE: f64 = MAX_DEGREE as f64 / 2.0;
        let least = self.range.least;
        if self.found.is_empty() {
            self.ask(least)?;
            let likely = self.law.mean_of_largest().round();
            if likely > least {
                self.ask(likely)?;
            }
        }
        while let Some(&(farthest, _)) = self.found.last().filter(|last| last.1 < wanted && last.0 < MOST_DEGREE) {
            self.ask(2.0 * farthest.max(8.0))?;
        }
        let mut halve = false;
        let mut latest = f64::NAN;
        loop {
            let place = self.found.partition_point(|&(_, height)| height < wanted);
            let (Some(&(reach, _)), Some(below)) = (self.found.get(place), place.checked_sub(1)) else {
                return Ok(self.found.get(place).or(self.found.last()).map_or(least, |&(x, _)| x));
            };
            let below = self.found[below].0;
            let slack = (SETTLED * reach).max(1.0);
            if reach - below <= slack {
                return Ok(reach);
            }
            let guess = self.interpolated(place, wanted).filter(|&x| x > below && x < reach);
            if let Some(settled) = guess.filter(|guess| is_settled(*guess, latest)) {
                return Ok(settled.ceil());
            }
            let middle = (0.5 * (below.ln_1p() + reach.ln_1p())).exp_m1();
            let guess =
                self.interpolated(place, wanted).filter(|&x| !halve && x > below && x < reach).unwrap_or(middle);
            // On the far side of the guess from the nearer end, so that the next bracket is a narrow one.
            let next = if reach - guess < guess - below { guess - 0.5 * slack } else { guess + 0.5 * slack };
            let next = next.round().clamp(below + 1.0, reach - 1.0);
            let height = self.ask(next)?;
            latest = next;
            halve = if height < wanted { reach - next } else { next - below } > 0.5 * (reach - below);
        }
    }

    /// Adds P(max ≤ x), and hands it back.
    fn ask(&mut self, x: f64) -> Result<f64, ForecastError> {
        let threshold = x as u64 + 1;
        let tail = if self.law.has_rough_tail() {
            self.law.rough_tail(threshold)?
        } else {
            self.law.tail(threshold, Accuracy::Working)?
        };
        let height = gumbel(tail.log_none);
        let place = self.found.partition_point(|&(known, _)| known < x);
        self.found.insert(place, (x, height));
        Ok(height)
    }

    /// Where ln(1 + x), interpolated in the heights of up to two degrees on either side of `place`, comes to `wanted`.
    fn interpolated(&self, place: usize, wanted: f64) -> Option<f64> {
        let about = &self.found[place.saturating_sub(2)..(place + 2).min(self.found.len())];
        let mut column: Vec<f64> = about.iter().map(|&(x, _)| x.ln_1p()).collect();
        for order in 1..column.len() {
            for i in 0..column.len() - order {
                let (low, high) = (about[i].1, about[i + order].1);
                column[i] = ((wanted - low) * column[i + 1] + (high - wanted) * column[i]) / (high - low);
            }
        }
        column.first().map(|log| log.exp_m1()).filter(|x| x.is_finite())
    }
}

/// Whether an interpolated place is as good as one closed in on: right beside the degree asked for last, where degrees are so many that
/// one more bends nothing, and not within rounding of a whole number.
fn is_settled(place: f64, latest: f64) -> bool {
    const SMOOTH_FROM: f64 = 1_000.0;
    const BESIDE: f64 = 2e-4;
    const APART: f64 = 0.02;
    let from_whole = (place - place.round()).abs();
    place > SMOOTH_FROM && (place - latest).abs() < BESIDE * place && from_whole > APART
}

/// −ln(−ln P) of a log-probability: the height of a Gumbel law, in which the largest of many degrees with a power-law tail is nearly
/// a straight line over ln(1 + x).
fn gumbel(log_probability: f64) -> f64 {
    -(-log_probability).clamp(f64::MIN_POSITIVE, -NOBODY).ln()
}

/// d ln P(max ≤ x)/d ln(1 + x) about x, by rough tails.
fn slope(law: &NetworkLaw, x: f64) -> Result<f64, ForecastError> {
    let higher = (x * SLOPE_STEP).max(x + 1.0).round();
    let at = |x: f64| Ok::<_, ForecastError>(law.rough_tail(x as u64 + 1)?.log_none.max(NOBODY));
    Ok((at(higher)? - at(x)?) / (higher.ln_1p() - x.ln_1p()))
}

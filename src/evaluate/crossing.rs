//! First passage of a tail size past a limit: from its laws at several days.

use std::sync::Arc;

use nalgebra::DMatrix;

use super::OriginError;
use super::prospect::{Prospect, of_growth};
use crate::forecast::{CountLaw, TailLaw};
use crate::growth::tail_correlations;
use crate::model::Change;
use crate::numerics::elementary::{normal_cdf, normal_quantile};
use crate::numerics::orthant::{Bridge, OrthantError, orthant_probability};

/// Probabilities are told apart down to this many standard deviations.
const FARTHEST_DEVIATION: f64 = 8.0;
/// Days that dates may be rounded by.
const DATE_ROUNDING: f64 = 1e-6;
/// Factors on the correlations of a path, tried until they are those of a process.
const NEARNESS: [f64; 5] = [1.0, 0.999, 0.99, 0.9, 0.0];

/// What is taken as known of the forces.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum View {
    /// Nothing beyond the fit: all that is uncertain counts.
    Whole,
    /// They lie so many standard deviations from the fit; chance alone counts.
    Known(f64),
}

/// Correlations by chance of a tail's sizes at some days; none where nodes in the tail stay in it.
#[derive(Debug, Clone)]
pub(super) struct Correlations(Option<Arc<Vec<Vec<f64>>>>);

impl Correlations {
    /// Those of the tail past `threshold` at `days` under `change`.
    ///
    /// # Errors
    /// Growth that cannot be computed.
    pub fn new(prospect: &Prospect, threshold: u64, days: &[f64], change: &Change) -> Result<Self, OriginError> {
        if !prospect.forces(change)?.has_losses() {
            return Ok(Self(None));
        }
        let course = prospect.course(change, days.last().copied().unwrap_or(0.0))?;
        let found =
            tail_correlations(&course, prospect.counts, threshold, days, prospect.cancelled).map_err(of_growth)?;
        Ok(Self(Some(Arc::new(found))))
    }

    /// Whether nodes in the tail stay in it.
    pub fn is_none(&self) -> bool {
        self.0.is_none()
    }
}

/// The size of one tail over some days.
pub(super) struct TailCourse {
    days: Vec<f64>,
    laws: Vec<TailLaw>,
    now: f64,
    correlations: Correlations,
}

impl TailCourse {
    /// The tail past `threshold` at `days`, ascending, under `change`.
    ///
    /// # Errors
    /// Cancellation; growth that cannot be computed.
    pub fn new(prospect: &Prospect, threshold: u64, days: &[f64], change: &Change) -> Result<Self, OriginError> {
        let correlations = Correlations::new(prospect, threshold, days, change)?;
        Self::correlated(prospect, threshold, days, change, correlations)
    }

    /// The same with the correlations by chance at hand, of nearly the same forces.
    ///
    /// # Errors
    /// Those of [`Self::new`].
    pub fn correlated(
        prospect: &Prospect,
        threshold: u64,
        days: &[f64],
        change: &Change,
        correlations: Correlations,
    ) -> Result<Self, OriginError> {
        let plan = prospect.plan(&[threshold], days)?;
        let laws = match correlations.is_none() {
            true => prospect.tails(&plan, change)?,
            false => prospect.fitted_tails(&plan, change)?,
        };
        let laws: Vec<TailLaw> = laws.into_iter().filter_map(|laws| laws.first().copied()).collect();
        let now = prospect.counts.tail_size(threshold) as f64;
        Ok(Self { days: plan.days().to_vec(), laws, now, correlations })
    }

    /// The days.
    pub fn days(&self) -> &[f64] {
        &self.days
    }

    /// The laws, one a day.
    pub fn laws(&self) -> &[TailLaw] {
        &self.laws
    }

    /// Whether nodes in the tail stay in it.
    pub fn is_monotone(&self) -> bool {
        self.correlations.is_none()
    }

    /// Probability at each day that the tail has had more than `most` nodes by then.
    ///
    /// # Errors
    /// Those of [`Self::crossed_by`].
    pub fn crossed(&self, most: f64, view: View) -> Result<Vec<f64>, OriginError> {
        let mut highest: f64 = 0.0;
        let by = |i: usize| -> Result<f64, OriginError> {
            // A sum over quasi-random points may fall by a rounding where the probability stands still.
            highest = highest.max(self.crossed_by(i, most, view)?);
            Ok(highest)
        };
        (0..self.laws.len()).map(by).collect()
    }

    /// The same at the day of index `last`.
    ///
    /// Formula: of a tail that never shrinks, the probability of being above, at the day where it is greatest so far. Of one that can
    /// shrink, 1 − P(Z_i ≤ b_i up to the day), Z a Gaussian (Student) process with the days' laws as its margins (a copula),
    /// correlated by chance as the growth law says, and wholly by what is uncertain of the forces; between days a Brownian bridge
    /// with the local variance of chance.
    ///
    /// # Errors
    /// When the process has no correlation matrix.
    pub fn crossed_by(&self, last: usize, most: f64, view: View) -> Result<f64, OriginError> {
        if self.now > most {
            return Ok(1.0);
        }
        let laws: Vec<CountLaw> = self.laws.iter().take(last + 1).map(|law| seen(law, view)).collect();
        let above = |law: &CountLaw| law.above(most);
        let Some(correlations) = &self.correlations.0 else {
            return Ok(laws.iter().map(above).fold(0.0, f64::max));
        };
        let place = |law: &CountLaw, most: f64| deviations(law.at_most(most));
        let bounds: Vec<f64> = laws.iter().map(|law| place(law, most)).collect();
        let doubt: Vec<f64> = self.laws.iter().map(|law| if view == View::Whole { law.doubt() } else { 0.0 }).collect();
        let chance: Vec<f64> = self.laws.iter().map(|law| law.chance.max(0.0).sqrt()).collect();
        let total: Vec<f64> =
            chance.iter().zip(&doubt).map(|(c, d)| c.hypot(*d).max(f64::MIN_POSITIVE.sqrt())).collect();
        // A path of whole numbers meets the limit at one more; the bound of a day lies half a node before. Beyond what probabilities tell
        // apart the distance itself stands in.
        let barrier = |((law, &bound), total): ((&CountLaw, &f64), &f64)| {
            let near = 0.5 * (bound + place(law, most + 1.0));
            let far = (most + 1.0 - law.floor() - law.rest().mean) / total;
            if bound < FARTHEST_DEVIATION { near } else { near.max(far) }
        };
        let barriers: Vec<f64> = laws.iter().zip(&bounds).zip(&total).map(barrier).collect();
        let bridge = |i: usize| {
            let Some(before) = i.checked_sub(1) else {
                let from = (most + 1.0 - self.now) / total[0];
                return Some(Bridge { from, to: barriers[0], deviation: chance[0] / total[0] });
            };
            let common = correlations[before][i] * chance[before] * chance[i];
            let increment = (chance[before].powi(2) + chance[i].powi(2) - 2.0 * common).max(0.0);
            let deviation = increment.sqrt() / (total[before] * total[i]).sqrt();
            Some(Bridge { from: barriers[before], to: barriers[i], deviation })
        };
        let bridges: Vec<Option<Bridge>> = (0..laws.len()).map(bridge).collect();
        let freedom = laws.iter().map(CountLaw::degrees_of_freedom).fold(f64::INFINITY, f64::min);
        let mut found = Err(OrthantError::NotANumber);
        // Correlations worked out one by one, to about a per cent, need not be those of any process; near them some are.
        for nearness in NEARNESS {
            let correlation = |i: usize, j: usize| {
                let common = correlations[i][j] * chance[i] * chance[j] + doubt[i] * doubt[j];
                if i == j { 1.0 } else { nearness * common / (total[i] * total[j]) }
            };
            let matrix = DMatrix::from_fn(laws.len(), laws.len(), correlation);
            found = orthant_probability(&matrix, &bounds, freedom, &bridges);
            if found.is_ok() {
                break;
            }
        }
        let kept = found.map_err(OriginError::Passage)?;
        Ok((1.0 - kept).max(laws.last().map_or(0.0, above)))
    }

    /// The probability of a crossing by `day`, from those at the days of the course: linear between them, in standard deviations.
    pub fn probability_at(&self, crossed: &[f64], day: f64) -> f64 {
        let after = self.days.partition_point(|&d| d < day - DATE_ROUNDING);
        let (Some(&to), Some(&p)) = (self.days.get(after), crossed.get(after)) else {
            return crossed.last().copied().unwrap_or(0.0);
        };
        if to <= day + DATE_ROUNDING {
            return p;
        }
        let Some(before) = after.checked_sub(1) else { return p * day / to };
        let part = (day - self.days[before]) / (to - self.days[before]);
        normal_cdf(deviations(crossed[before]) * (1.0 - part) + deviations(p) * part)
    }

    /// The first day by which the crossing has come with `probability`; none when it has not by the last.
    pub fn day_at(&self, crossed: &[f64], probability: f64) -> Option<f64> {
        let reached = crossed.iter().position(|&p| p >= probability)?;
        let (day, p) = (*self.days.get(reached)?, *crossed.get(reached)?);
        let before = reached.checked_sub(1).map(|i| (self.days[i], crossed[i]));
        let Some((day_before, p_before)) = before else {
            return Some(if p > 0.0 { day * probability / p } else { day });
        };
        let (low, high) = (deviations(p_before), deviations(p));
        let part = if high > low { (deviations(probability) - low) / (high - low) } else { 1.0 };
        Some(day_before + (day - day_before) * part.clamp(0.0, 1.0))
    }
}

/// A tail's law as far as the forces are known.
fn seen(law: &TailLaw, view: View) -> CountLaw {
    let View::Known(deviations) = view else { return law.law };
    let (floor, rest) = (law.law.floor(), law.law.rest().mean);
    let mean = (rest + deviations * law.doubt()).max(0.0);
    CountLaw::new(floor, mean, if rest > 0.0 { law.chance * mean / rest } else { law.chance })
}

/// A probability in standard deviations.
fn deviations(probability: f64) -> f64 {
    normal_quantile(probability).clamp(-FARTHEST_DEVIATION, FARTHEST_DEVIATION)
}

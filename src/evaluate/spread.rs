//! How far pooled forecasts of this network miss, beyond chance and beyond what their members disagree by.

use super::pool::{DECAY, FEWEST_NODES, OTHER_HORIZON};
use super::record::{Growth, Target};

/// Relative error of a flow one period ahead, while a network has no record of its own. A stated default: what pooled forecasts
/// of simulated networks of mixed kinds and of two real ones miss by.
pub const DEFAULT_FLOW_ERROR: f64 = 0.04;
/// The default counts as so many scored dates.
const DEFAULT_COUNTS_AS: f64 = 1.0;
/// That variances are as computed counts as so many scored dates.
const SCALE_COUNTS_AS: f64 = 2.0;
/// Variances are never taken for less than this share of what was computed.
const LEAST_SCALE: f64 = 0.5;
/// A miss counts for at most this many times its variance.
const MOST_SURPRISE: f64 = 9.0;
/// Variance of rounding to whole nodes.
const ROUNDING_VARIANCE: f64 = 1.0 / 12.0;
/// Degrees of freedom without a record.
const FEWEST_DEGREES: f64 = 4.0;

/// The pooled forecast of one tail, before model error.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct PooledTail {
    /// Its middle.
    pub size: f64,
    /// Nodes that are in the tail for certain, or expected to stay in it.
    pub kept: f64,
    /// Variance by chance.
    pub chance: f64,
    /// Variance by chance and by what the members disagree by.
    pub variance: f64,
    /// Variance that the uncertainty of arrivals and landings adds; 0 where they are known.
    pub of_growth: f64,
}

impl PooledTail {
    /// Nodes that come past the threshold.
    pub fn flow(&self) -> f64 {
        (self.size - self.kept).max(0.0)
    }
}

/// By how much the pooled forecast of one date missed.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Miss {
    /// Place of the origin among the records.
    origin: usize,
    /// Periods ahead.
    ahead: f64,
    /// Whether the totals were known.
    known: bool,
    /// Mean of (miss² − variance)/flow² over the thresholds, weighed by how much each tells.
    excess: f64,
    /// Mean of miss²/variance over the thresholds, the flow's error included in the variance.
    surprise: f64,
}

/// What a network's record makes of a forecast's variance.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Spread {
    /// Relative error of a flow past a threshold.
    pub flow_error: f64,
    /// Factor on all of the variance: misses squared over what was allowed for them.
    pub scale: f64,
    /// What the record's misses count as, for Student's quantiles.
    pub degrees_of_freedom: f64,
}

impl Spread {
    /// The variance of a pooled tail.
    pub(super) fn variance(&self, tail: &PooledTail) -> f64 {
        self.scale * self.allowed(tail)
    }

    fn allowed(&self, tail: &PooledTail) -> f64 {
        tail.variance + (self.flow_error * tail.flow()).powi(2) + tail.of_growth
    }
}

/// The miss at one date, from the pooled tails and what came, where `spread` was allowed for; none where too few nodes came.
pub(super) fn miss(origin: usize, target: &Target, tails: &[(PooledTail, f64)], spread: &Spread) -> Option<Miss> {
    let (mut sum, mut total) = (0.0, 0.0);
    let (mut surprise, mut count) = (0.0, 0.0);
    for (tail, came) in tails.iter().filter(|(tail, came)| *came >= FEWEST_NODES && tail.flow() > 0.0) {
        let (squared, missed) = (tail.flow().powi(2), (came - tail.size).powi(2));
        // Weights of least squares, a miss² having a variance of about twice the square of its expectation.
        let weight = squared / (tail.variance + DEFAULT_FLOW_ERROR.powi(2) * squared).powi(2);
        sum += weight * (missed - tail.variance);
        total += weight * squared;
        // Half a node is rounding, and a single outlier is not to widen all to come.
        surprise += (missed / (spread.allowed(tail) + ROUNDING_VARIANCE)).min(MOST_SURPRISE);
        count += 1.0;
    }
    let (ahead, known) = (target.ahead, target.growth == Growth::Known);
    (total > 0.0).then(|| Miss { origin, ahead, known, excess: sum / total, surprise: surprise / count })
}

/// The spread `ahead` periods from the origin at place `origin`, of forecasts whose totals are `known` or not, by the misses known
/// there.
///
/// Formula: flow error r² = (ν·r₀²·h + Σ a·x·h/h')/(ν + Σ a), at least 0: x the excess of a miss at horizon h' where totals were known,
/// a = 0.7^age, halved at other horizons than h, r₀ the default, ν = 1; the square grows with the horizon as that of a random walk
/// does. Scale = (μ + Σ a·s)/(μ + Σ a), s the surprise of a miss of the same kind of totals and μ = 2.
pub(super) fn spread(misses: &[Miss], origin: usize, ahead: f64, known: bool) -> Spread {
    let default = DEFAULT_FLOW_ERROR.powi(2) * ahead;
    let (mut excess, mut of_known) = (DEFAULT_COUNTS_AS * default, DEFAULT_COUNTS_AS);
    let (mut surprise, mut of_kind) = (0.0, 0.0);
    for miss in misses {
        let age = origin as f64 - miss.origin as f64 - miss.ahead;
        if age < 0.0 {
            continue;
        }
        let same = miss.ahead.round() == ahead.round();
        let weight = DECAY.powf(age) * if same { 1.0 } else { OTHER_HORIZON };
        if miss.known {
            excess += weight * miss.excess * ahead / miss.ahead;
            of_known += weight;
        }
        if miss.known == known {
            surprise += weight * miss.surprise;
            of_kind += weight;
        }
    }
    let scale = (SCALE_COUNTS_AS + surprise) / (SCALE_COUNTS_AS + of_kind);
    Spread {
        flow_error: (excess / of_known).max(0.0).sqrt(),
        scale: scale.max(LEAST_SCALE),
        degrees_of_freedom: FEWEST_DEGREES + of_kind,
    }
}

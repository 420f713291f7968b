//! How far pooled forecasts of this network miss, beyond chance and beyond what their members disagree by.

use super::pool::{DECAY, FEWEST_NODES, OTHER_HORIZON};

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
    /// Variance by chance and by what the members disagree by.
    pub variance: f64,
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
        self.scale * (tail.variance + (self.flow_error * tail.flow()).powi(2))
    }
}

/// The miss at one date, from the pooled tails and what came, where `spread` was allowed for; none where too few nodes came.
pub(super) fn miss(origin: usize, ahead: f64, tails: &[(PooledTail, f64)], spread: &Spread) -> Option<Miss> {
    let (mut sum, mut total) = (0.0, 0.0);
    let (mut surprise, mut count) = (0.0, 0.0);
    for (tail, came) in tails.iter().filter(|(tail, came)| *came >= FEWEST_NODES && tail.flow() > 0.0) {
        let (squared, missed) = (tail.flow().powi(2), (came - tail.size).powi(2));
        // Weights of least squares, a miss² having a variance of about twice the square of its expectation.
        let weight = squared / (tail.variance + DEFAULT_FLOW_ERROR.powi(2) * squared).powi(2);
        sum += weight * (missed - tail.variance);
        total += weight * squared;
        // Half a node is rounding, and a single outlier is not to widen all to come.
        let allowed = tail.variance + (spread.flow_error * tail.flow()).powi(2) + ROUNDING_VARIANCE;
        surprise += (missed / allowed).min(MOST_SURPRISE);
        count += 1.0;
    }
    (total > 0.0).then(|| Miss { origin, ahead, excess: sum / total, surprise: surprise / count })
}

/// The spread `ahead` periods from the origin at place `origin`, by the misses known there.
///
/// Formula: flow error r² = (ν·r₀²·h + Σ a·x·h/h')/(ν + Σ a), at least 0: x the excess of a miss at horizon h', a = 0.7^age, halved
/// at other horizons than h, r₀ the default, ν = 1; the square grows with the horizon as that of a random walk does. Scale =
/// (μ + Σ a·s)/(μ + Σ a), s the surprise of a miss and μ = 2.
pub(super) fn spread(misses: &[Miss], origin: usize, ahead: f64) -> Spread {
    let default = DEFAULT_FLOW_ERROR.powi(2) * ahead;
    let (mut excess, mut surprise, mut total) = (0.0, 0.0, 0.0);
    for miss in misses {
        let age = origin as f64 - miss.origin as f64 - miss.ahead;
        if age >= 0.0 {
            let same = miss.ahead.round() == ahead.round();
            let weight = DECAY.powf(age) * if same { 1.0 } else { OTHER_HORIZON };
            excess += weight * miss.excess * ahead / miss.ahead;
            surprise += weight * miss.surprise;
            total += weight;
        }
    }
    let squared = (DEFAULT_COUNTS_AS * default + excess) / (DEFAULT_COUNTS_AS + total);
    let scale = (SCALE_COUNTS_AS + surprise) / (SCALE_COUNTS_AS + total);
    Spread {
        flow_error: squared.max(0.0).sqrt(),
        scale: scale.max(LEAST_SCALE),
        degrees_of_freedom: FEWEST_DEGREES + total,
    }
}

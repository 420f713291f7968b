//! How well a fitted law reproduces the counts, and what to warn of.

use rand::SeedableRng;
use rand::rngs::SmallRng;
use rand_distr::{Binomial, Distribution};

use super::stationary::StationaryLaw;
use super::{Goodness, Model, ModelChoice, TailPoint};
use crate::model::{DegreeCounts, Warning};

/// Tail points grow by this factor in degree.
const POINT_GROWTH: f64 = 1.25;
/// Bootstrap samples of the goodness of fit, at most …
const REPLICATES: u32 = 199;
/// … and no more once so many lie as far as the counts: the p-value is then good to a fifth of itself, and far from any that warns.
const ENOUGH_AS_FAR: u32 = 20;
/// Tail points with fewer observed nodes say little about a ratio.
const RATIO_NODES: u64 = 10;
/// A misfit is worth a warning when chance would show it less often than this …
const UNLIKELY: f64 = 0.01;
/// … and some tail point is off by more than this factor.
const WORTH_A_WARNING: f64 = 1.25;
/// Fewer nodes than this past the fitted tail's start leave its exponent to guesswork.
const FEW_HUBS: u64 = 50;
/// Hubs are counted from this many times the mean degree.
const HUB_TIMES_MEAN: f64 = 5.0;

/// Observed and fitted tail at log-spaced degrees up to the largest.
pub(super) fn stationary_tail(counts: &DegreeCounts, law: &StationaryLaw) -> Vec<TailPoint> {
    let mut degrees = vec![counts.smallest().max(1)];
    while let Some(&last) = degrees.last().filter(|&&k| k < counts.largest()) {
        degrees.push(((last as f64 * POINT_GROWTH).ceil() as u64).min(counts.largest()));
    }
    let fitted = law.tail(&degrees);
    let nodes = counts.nodes() as f64;
    let point =
        |(&degree, share): (&u64, f64)| TailPoint { degree, observed: counts.tail_size(degree), fitted: nodes * share };
    degrees.iter().zip(fitted).map(point).collect()
}

/// Largest distance between the two tails, with its p-value by seeded samples of the fitted law (parametric bootstrap
/// without refitting, so the p-value is somewhat too large; Clauset, Shalizi & Newman 2009 refit), drawn one by one until enough lie as
/// far (Besag & Clifford 1991, doi:10.1093/biomet/78.2.301).
pub(super) fn goodness(tail: &[TailPoint], nodes: u64, seed: u64) -> Goodness {
    let total = nodes as f64;
    let observed = distance(tail.iter().map(|p| (p.observed as f64, p.fitted)), total);
    let mut rng = SmallRng::seed_from_u64(seed);
    let (mut as_far, mut replicates) = (0_u32, 0_u32);
    while replicates < REPLICATES && as_far < ENOUGH_AS_FAR {
        replicates += 1;
        // Walk down the tail: of the nodes past one degree, a binomial number is past the next.
        let (mut left, mut share_before, mut worst) = (nodes, 1.0, 0.0_f64);
        for point in tail {
            let share = (point.fitted / total).min(1.0);
            let onward = if share_before > 0.0 { (share / share_before).clamp(0.0, 1.0) } else { 0.0 };
            left = Binomial::new(left, onward).map_or(0, |law| law.sample(&mut rng));
            worst = worst.max((left as f64 - point.fitted).abs() / total);
            if left == 0 || worst >= observed {
                break; // Nothing is left farther on, where the fitted tail only falls; or it is as far already.
            }
            share_before = share;
        }
        as_far += u32::from(worst >= observed);
    }
    let p_value = match as_far {
        ENOUGH_AS_FAR => f64::from(as_far) / f64::from(replicates),
        _ => f64::from(as_far + 1) / f64::from(replicates + 1),
    };
    Goodness {
        distance: observed,
        p_value: Some(p_value),
        replicates,
        worst_log_ratio: worst_log_ratio(tail),
        dispersion: None,
        flow_error: None,
    }
}

/// Goodness of a fit by crossing flows: the tail predicted for the newest snapshot, and the flows' dispersion.
pub(super) fn flow_goodness(tail: &[TailPoint], nodes: u64, dispersion: f64, flow_error: f64) -> Goodness {
    let distance = distance(tail.iter().map(|p| (p.observed as f64, p.fitted)), nodes as f64);
    Goodness {
        distance,
        p_value: None,
        replicates: 0,
        worst_log_ratio: worst_log_ratio(tail),
        dispersion: Some(dispersion),
        flow_error: Some(flow_error),
    }
}

fn distance(points: impl Iterator<Item = (f64, f64)>, total: f64) -> f64 {
    points.map(|(observed, fitted)| (observed - fitted).abs() / total).fold(0.0, f64::max)
}

/// ln(observed/fitted), finite also where the fitted tail underflows.
fn log_ratio(point: &TailPoint) -> f64 {
    (point.observed as f64).ln() - point.fitted.max(f64::MIN_POSITIVE).ln()
}

fn worst_log_ratio(tail: &[TailPoint]) -> f64 {
    let ratios = tail.iter().filter(|p| p.observed >= RATIO_NODES).map(log_ratio);
    ratios.fold(0.0, |worst: f64, ratio| if ratio.abs() > worst.abs() { ratio } else { worst })
}

/// Warnings about a fit that its figures justify.
pub(super) fn warnings(
    counts: &DegreeCounts,
    tail: &[TailPoint],
    goodness: &Goodness,
    choice: ModelChoice,
) -> Vec<Warning> {
    let mut warnings = Vec::new();
    let hubs_from = (HUB_TIMES_MEAN * counts.mean_degree()).ceil().max(1.0) as u64;
    let hubs = counts.tail_size(hubs_from);
    if hubs < FEW_HUBS {
        let detail = format!(
            "nodes with {hubs_from} links or more (five times the mean): {hubs}; the tail, and so the forecast of large hubs, \
             rests on little"
        );
        warnings.push(Warning::new("few_hubs", detail));
    }
    let misfit = goodness.worst_log_ratio.abs() > WORTH_A_WARNING.ln();
    let beyond_chance = goodness.p_value.is_some_and(|p| p <= UNLIKELY) || goodness.dispersion.is_some_and(|d| d > 2.0);
    if misfit && beyond_chance {
        let worst = tail
            .iter()
            .filter(|p| p.observed >= RATIO_NODES)
            .max_by(|a, b| log_ratio(a).abs().total_cmp(&log_ratio(b).abs()));
        if let Some(p) = worst {
            let misfit = match choice {
                ModelChoice::Only(Model::Uniform) => "uniform attachment alone does not reproduce these counts",
                ModelChoice::Only(Model::Preferential) => {
                    "preferential attachment alone does not reproduce these counts"
                }
                _ => "no mix of uniform and preferential attachment reproduces these counts",
            };
            let detail = format!(
                "{misfit}: at {} links the fit has {:.1} nodes where {} were counted; trust the near thresholds more than the \
                 far ones",
                p.degree, p.fitted, p.observed
            );
            warnings.push(Warning::new("poor_fit", detail));
        }
    }
    if let Some(p) = tail.last().filter(|p| p.fitted < UNLIKELY && p.observed > 0) {
        let detail = format!(
            "the largest node ({} links) is beyond the fit, which expects {:.2e} nodes that large; it may follow another law, \
             or be several nodes counted as one",
            counts.largest(),
            p.fitted
        );
        warnings.push(Warning::new("largest_node_beyond_fit", detail));
    }
    warnings
}

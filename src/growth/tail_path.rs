//! How a tail's sizes at different days go together.

use super::law::NodeLaw;
use super::mean_field::{Course, GrowthError};
use super::tails::{NetworkLaw, TailParts};
use crate::model::DegreeCounts;
use crate::numerics::tolerances::Accuracy;

/// First class of degrees past the threshold, relative; each further one is twice as wide.
const FIRST_CLASS: f64 = 0.01;
/// Classes that hold less than this share of the tail are left out.
const NEGLIGIBLE_CLASS: f64 = 1e-6;

/// Correlations of the tail size S_j at the given days (ascending), were the forces known: one row a day, symmetric.
///
/// Formula: `Cov(S(s), S(t)) = Σ_l n_l(s)·D(s,t)·P_{s→t}(l → ≥ j) − Σ_k n_k·q_k(s)·q_k(t)` for s ≤ t, n_l(s) the expected nodes of
/// degree l ≥ j at s and q_k the probability that a present node of degree k is in the tail: nodes are independent, and newcomers
/// Poisson.
///
/// # Numerical notes
/// Degrees past the threshold are taken in classes that widen from 1 % of it on, each at its geometric middle and with its law by
/// two moments: within about 1 % of the correlation. Cost: days × classes tails of the network, days² × classes tails of a node.
///
/// # Errors
/// Those of [`NetworkLaw::tail`]; cancellation.
pub fn tail_correlations(
    course: &Course,
    counts: &DegreeCounts,
    threshold: u64,
    days: &[f64],
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<Vec<f64>>, GrowthError> {
    let edges = class_edges(threshold);
    let mut parts: Vec<TailParts> = Vec::new();
    let mut classes: Vec<Vec<(u64, f64)>> = Vec::new();
    for &day in days {
        let law = NetworkLaw::at(course, counts, day)?.until(cancelled);
        let tail = law.parts(threshold, Accuracy::Working)?;
        let whole = tail.sum(threshold).mean;
        let (mut from, mut held) = ((threshold, whole), Vec::new());
        for &edge in &edges {
            let beyond = if from.1 > NEGLIGIBLE_CLASS * whole { law.rough_tail(edge)?.mean } else { 0.0 };
            held.push((middle(from.0, edge), (from.1 - beyond).max(0.0)));
            from = (edge, beyond);
            if beyond <= NEGLIGIBLE_CLASS * whole {
                break;
            }
        }
        held.push((from.0, from.1));
        parts.push(tail);
        classes.push(held);
    }
    let mut covariances = vec![vec![0.0; days.len()]; days.len()];
    for i in 0..days.len() {
        covariances[i][i] = parts[i].sum(threshold).variance;
        for j in i + 1..days.len() {
            let law = NodeLaw::between(course, days[i], days[j]);
            let survival = course.survival(days[j] - days[i]);
            let mut both = 0.0;
            for &(degree, nodes) in classes[i].iter().filter(|class| class.1 > 0.0) {
                both += nodes * survival * law.moments_above(degree, threshold)[0];
            }
            covariances[i][j] = both - products(&parts[i], &parts[j]);
            covariances[j][i] = covariances[i][j];
        }
    }
    let deviation: Vec<f64> = (0..days.len()).map(|i| covariances[i][i].max(f64::MIN_POSITIVE).sqrt()).collect();
    let correlation = |i: usize, j: usize| {
        if i == j { 1.0 } else { (covariances[i][j] / (deviation[i] * deviation[j])).clamp(-1.0, 1.0) }
    };
    Ok((0..days.len()).map(|i| (0..days.len()).map(|j| correlation(i, j)).collect()).collect())
}

/// Σ n_k·q_k(s)·q_k(t); both lists run down from the largest degree, and what one leaves out is as good as 0 there.
fn products(earlier: &TailParts, later: &TailParts) -> f64 {
    let pairs = earlier.present.iter().zip(&later.present);
    pairs.map(|(a, b)| a.nodes * a.probability * b.probability).sum()
}

/// Ends of classes of degrees past `threshold`, up to where a node is not seen to come back below.
fn class_edges(threshold: u64) -> Vec<u64> {
    let mut width = (FIRST_CLASS * threshold as f64).max(1.0);
    let mut edges = Vec::new();
    let mut at = threshold as f64;
    // Ten doublings reach ten times the threshold.
    for _ in 0..10 {
        at += width.round();
        edges.push(at as u64);
        width *= 2.0;
    }
    edges
}

fn middle(from: u64, to: u64) -> u64 {
    let last = to.saturating_sub(1).max(from);
    ((from as f64 * last as f64).sqrt().round() as u64).max(from)
}

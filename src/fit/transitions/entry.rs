//! Newcomers' degrees on arrival, from their degrees at the end of the period in which they arrived.

use std::collections::BTreeMap;

use crate::model::{EntryDegrees, MAX_DEGREE};

/// Degrees on arrival are told apart one by one up to here; above, a newcomer's gain is taken off by its expectation.
const SINGLE_DEGREES: u64 = 60;
/// Steps of the iteration; more would fit the noise of the counts.
const STEPS: usize = 40;
/// An iteration that moves no share by more than this has settled.
const SETTLED: f64 = 1e-7;
/// Degrees on arrival above the single ones are gathered into cells that grow by this factor.
const CELL_GROWTH: f64 = 1.15;

/// Entry degrees whose law after growth comes nearest to `newcomers` (degree at the end, nodes).
///
/// Formula: Richardson (1972) and Lucy (1974) iteration, which keeps shares positive and adding up to one; `law(k, j)` is the
/// probability of degree j at the end from k on arrival.
pub(super) fn entry_degrees(newcomers: &[(u64, u64)], law: impl Fn(u64, u64) -> f64) -> Option<EntryDegrees> {
    let total: u64 = newcomers.iter().map(|&(_, nodes)| nodes).sum();
    if total == 0 {
        return None;
    }
    let observed: Vec<(u64, f64)> =
        newcomers.iter().filter(|&&(j, _)| j <= SINGLE_DEGREES).map(|&(j, n)| (j, n as f64 / total as f64)).collect();
    let most = observed.iter().map(|&(j, _)| j).max().unwrap_or(0);
    let matrix: Vec<Vec<f64>> = observed.iter().map(|&(j, _)| (0..=most).map(|k| law(k, j)).collect()).collect();
    let low: f64 = observed.iter().map(|&(_, share)| share).sum();
    let mut shares = vec![low / (most + 1) as f64; most as usize + 1];
    for &(j, share) in &observed {
        // Starting near the answer: what is seen at the end, thinly spread over the rest.
        shares[j as usize] += share;
    }
    for _ in 0..STEPS {
        let mut next = vec![0.0; shares.len()];
        for (row, &(_, share)) in matrix.iter().zip(&observed) {
            let fitted: f64 = row.iter().zip(&shares).map(|(p, e)| p * e).sum();
            for (to, (p, e)) in next.iter_mut().zip(row.iter().zip(&shares)) {
                *to += share * p * e / fitted.max(f64::MIN_POSITIVE);
            }
        }
        let moved = next.iter().zip(&shares).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max);
        shares = next;
        if moved < SETTLED {
            break;
        }
    }
    let mut found: BTreeMap<u64, f64> = shares.iter().enumerate().map(|(k, &e)| (k as u64, e)).collect();
    let gained = |j: u64| mean_gain(&law, SINGLE_DEGREES) * j as f64 / SINGLE_DEGREES as f64;
    for &(j, nodes) in newcomers.iter().filter(|&&(j, _)| j > SINGLE_DEGREES) {
        let entry = (j as f64 - gained(j)).max(SINGLE_DEGREES as f64).round() as u64;
        *found.entry(cell(entry)).or_insert(0.0) += nodes as f64 / total as f64;
    }
    let sum: f64 = found.values().sum();
    let pairs: Vec<(u64, f64)> = found.into_iter().map(|(k, e)| (k, e / sum)).collect();
    EntryDegrees::from_shares(&pairs).ok()
}

/// Expected gain of a newcomer that arrives with `degree` links.
fn mean_gain(law: &impl Fn(u64, u64) -> f64, degree: u64) -> f64 {
    (0..4 * degree).map(|j| j as f64 * law(degree, j)).sum::<f64>() - degree as f64
}

/// The cell's degree for a large entry degree.
fn cell(degree: u64) -> u64 {
    let steps = ((degree as f64 / SINGLE_DEGREES as f64).ln() / CELL_GROWTH.ln()).round();
    ((SINGLE_DEGREES as f64 * CELL_GROWTH.powf(steps)).round() as u64).min(MAX_DEGREE)
}

//! How far the score of a one-snapshot likelihood really scatters from network to network.
//!
//! The nodes of one network are not independent draws from the degree law: their ages are spread evenly, and they compete
//! for a fixed number of links. Taking them as independent makes intervals 1.2 to 2.3 times too wide.

use super::stationary::StationaryLaw;
use crate::model::{AttachmentMix, EntryDegrees};

/// Degrees up to the largest entry degree plus this are kept one by one, for each link an arrival brings and one more; above, cells grow
/// by [`CELL_GROWTH`].
const SINGLE_DEGREES: f64 = 40.0;
const MOST_SINGLE_DEGREES: f64 = 300.0;
const CELL_GROWTH: f64 = 1.08;
/// The grid ends where the tail falls below this share of nodes.
const TAIL_END: f64 = 1e-10;
/// Steps of the backward equation: the first, their growth, and where e^{−τ} has made the rest negligible.
const FIRST_STEP: f64 = 0.02;
const STEP_GROWTH: f64 = 1.05;
const LAST_AGE: f64 = 20.0;
/// Half-width of the difference quotient in p.
const SHARE_STEP: f64 = 1e-4;

/// Computes Fisher information over the variance of the score, per node, at mix p: what twice the fall of the
/// log-likelihood must be multiplied by to be read as χ².
///
/// Formula: with s_k = ∂ ln P_k/∂p and h_τ(k) = E[s(degree) | degree k an age τ = ln(N/x) ago], each of the ℓ ends landing
/// with the x-th arrival moves the expected score by h_τ(k+1) − h_τ(k), k drawn from the mix. The score is the sum of these
/// martingale steps, so its variance per node is `ℓ·∫ e^{−τ}·[Σ π_k Δ_k² − (Σ π_k Δ_k)²] dτ + ∫ e^{−τ}·Var_e(h_τ) dτ`
/// (own derivation; the martingale central limit theorem is Hall & Heyde 1980, chapter 3). The backward equation is
/// `dh/dτ = (α + βk)·(h(k+1) − h(k))`.
///
/// # Numerical notes
/// Implicit Euler on a grid of single degrees, then cells: within 1.1 % of the same on 1,000 single degrees, cells that grow by 2 % and
/// steps that grow by 1 % from 0.005, at 0.5 to 20 links an arrival and shares from 0.02 to 0.95.
/// Checked by coverage on grown networks (`studies/mix_coverage.rs`).
pub(super) fn information_over_variance(share: f64, links_per_arrival: f64, entry: &EntryDegrees) -> f64 {
    let law = |p: f64| {
        StationaryLaw::new(
            AttachmentMix::new(p.clamp(0.0, 1.0)).unwrap_or(AttachmentMix::UNIFORM),
            links_per_arrival,
            entry.clone(),
        )
    };
    // Half-way to a boundary at most: at p = 1 a law without first links has no logarithm.
    let toward = |end: f64| share + (0.5 * (end - share)).clamp(-SHARE_STEP, SHARE_STEP);
    let (low, high) = (toward(0.0), toward(1.0));
    let here = law(share);
    let entered = entry.shares().last().map_or(0, |&(degree, _)| degree - entry.smallest()) as f64;
    let single = (SINGLE_DEGREES * (1.0 + links_per_arrival) + entered).min(MOST_SINGLE_DEGREES) as u64;
    let grid = degree_grid(&here, entry.smallest(), single);
    let cells = grid.len() - 1;
    let tails = here.tail(&grid);
    let mass: Vec<f64> = tails.windows(2).map(|pair| pair[0] - pair[1]).collect();
    let (below, above) = (law(low).log_pmf(&grid), law(high).log_pmf(&grid));
    let mut h: Vec<f64> = (0..cells).map(|i| (above[i] - below[i]) / (high - low)).collect();
    let mean: f64 = h.iter().zip(&mass).map(|(s, m)| s * m).sum();
    let information: f64 = h.iter().zip(&mass).map(|(s, m)| m * (s - mean) * (s - mean)).sum();

    let width: Vec<f64> = grid.windows(2).map(|pair| (pair[1] - pair[0]) as f64).collect();
    let gain: Vec<f64> = grid.iter().zip(&width).map(|(&k, w)| here.gain(k as f64 + 0.5 * (w - 1.0))).collect();
    let hazard: Vec<f64> = gain.iter().zip(&width).map(|(gain, width)| gain / width).collect();
    let mut stays = vec![0.0; cells - 1];
    let entry_shares: Vec<(usize, f64)> = entry
        .shares()
        .iter()
        .map(|&(k, share)| (grid.partition_point(|&g| g <= k).saturating_sub(1).min(cells - 1), share))
        .collect();
    let flows: Vec<(f64, f64)> =
        gain.iter().zip(&mass).zip(&width).map(|((gain, mass), &width)| (gain * mass, width)).take(cells - 1).collect();
    let rate = |h: &[f64]| {
        let (mut square, mut first) = (0.0, 0.0);
        for (i, &(flow, width)) in flows.iter().enumerate() {
            let step = (h[i + 1] - h[i]) / width;
            square += flow * step * step;
            first += flow * step;
        }
        let entry_mean: f64 = entry_shares.iter().map(|&(i, share)| share * h[i]).sum();
        let entry_variance: f64 = entry_shares.iter().map(|&(i, share)| share * (h[i] - entry_mean).powi(2)).sum();
        // π_k = (α + βk)·P_k/ℓ, so ℓ·(Σ π Δ)² = (Σ (α + βk)·P_k·Δ)²/ℓ.
        square - first * first / links_per_arrival + entry_variance
    };
    let (mut age, mut step, mut before, mut variance) = (0.0_f64, FIRST_STEP, rate(&h), 0.0);
    while age < LAST_AGE {
        h[cells - 1] += step * gain[cells - 1] * (h[cells - 1] - h[cells - 2]) / width[cells - 2];
        // The divisions first: they do not wait for one another as the cells do.
        for (stays, hazard) in stays.iter_mut().zip(&hazard) {
            *stays = 1.0 / (1.0 + step * hazard);
        }
        for i in (0..cells - 1).rev() {
            h[i] = stays[i] * h[i] + (1.0 - stays[i]) * h[i + 1];
        }
        let after = rate(&h);
        variance += 0.5 * step * ((-age).exp() * before + (-age - step).exp() * after);
        (age, before) = (age + step, after);
        step *= STEP_GROWTH;
    }
    information / variance
}

/// Cell edges from the smallest entry degree to where the tail has ended.
fn degree_grid(law: &StationaryLaw, smallest: u64, single: u64) -> Vec<u64> {
    let mut grid: Vec<u64> = (smallest..=smallest + single).collect();
    let mut edge = smallest + single;
    while edge < crate::model::MAX_DEGREE / 2 && law.tail(&[edge])[0] > TAIL_END {
        edge = (edge as f64 * CELL_GROWTH).ceil() as u64;
        grid.push(edge);
    }
    grid
}

//! Exact intervals of a binomial share and of a Poisson mean.

use statrs::function::beta::checked_beta_reg;
use statrs::function::gamma::checked_gamma_lr;

use super::roots::increasing_root;

/// Bounds are found to this, relative.
const CLOSENESS: f64 = 1e-10;
/// ln of the smallest share told apart from 0.
const SMALLEST: f64 = -80.0;

/// Computes the central interval of a share of which `successes` in `trials` were seen (Clopper & Pearson 1934).
///
/// # Numerical notes
/// Bracketed search in the logarithm, at most 200 steps whatever the counts: a search over all doubles can take forever at
/// counts of 10¹¹.
///
/// ```
/// use tailcast::numerics::intervals::binomial_share;
/// // Clopper & Pearson's closed cases: none of n, and all of n.
/// let (low, high) = binomial_share(0.0, 10.0, 0.9);
/// assert!(low == 0.0 && (high - (1.0 - 0.05f64.powf(0.1))).abs() < 1e-9);
/// assert!(binomial_share(163.0, 1.5e11, 0.9).1 < 1.3e-9);
/// ```
pub fn binomial_share(successes: f64, trials: f64, level: f64) -> (f64, f64) {
    let failures = trials - successes;
    let bound = |a: f64, b: f64, probability: f64| {
        let excess = |y: f64| checked_beta_reg(a, b, y.exp().min(1.0)).unwrap_or(1.0) - probability;
        increasing_root(SMALLEST, 0.0, CLOSENESS, excess).exp()
    };
    let low = if successes == 0.0 { 0.0 } else { bound(successes, failures + 1.0, 0.5 - 0.5 * level) };
    let high = if failures == 0.0 { 1.0 } else { bound(successes + 1.0, failures, 0.5 + 0.5 * level) };
    (low, high)
}

/// Computes P(X ≥ `successes`) for X binomial with so many trials, each a success with probability `share` in (0, 1).
///
/// ```
/// use tailcast::numerics::intervals::binomial_tail;
/// // Two of two, and at least one of two.
/// assert!((binomial_tail(2, 2, 0.1) - 0.01).abs() < 1e-12);
/// assert!((binomial_tail(1, 2, 0.1) - 0.19).abs() < 1e-12);
/// assert_eq!(binomial_tail(0, 2, 0.1), 1.0);
/// ```
pub fn binomial_tail(successes: u64, trials: u64, share: f64) -> f64 {
    match successes {
        0 => 1.0,
        _ if successes > trials => 0.0,
        // P(X ≥ k) is the regularised incomplete beta function I_share(k, n − k + 1).
        _ => checked_beta_reg(successes as f64, (trials - successes) as f64 + 1.0, share).unwrap_or(1.0),
    }
}

/// Computes the central interval of a Poisson mean of which `count` was seen (Garwood 1936).
///
/// ```
/// use tailcast::numerics::intervals::poisson_mean;
/// // Garwood's table at 90 %: 10 seen, 5.43 to 16.96 (from memory).
/// let (low, high) = poisson_mean(10.0, 0.9);
/// assert!((low - 5.425).abs() < 2e-3 && (high - 16.962).abs() < 2e-3);
/// ```
pub fn poisson_mean(count: f64, level: f64) -> (f64, f64) {
    let bound = |shape: f64, probability: f64| {
        let excess = |y: f64| checked_gamma_lr(shape, y.exp()).unwrap_or(1.0) - probability;
        increasing_root(SMALLEST, (shape + 40.0 * shape.sqrt() + 40.0).ln(), CLOSENESS, excess).exp()
    };
    let low = if count == 0.0 { 0.0 } else { bound(count, 0.5 - 0.5 * level) };
    (low, bound(count + 1.0, 0.5 + 0.5 * level))
}

//! Counting laws fitted to a mean and a variance.

use statrs::function::beta::checked_beta_reg;
use statrs::function::gamma::{checked_gamma_lr, checked_gamma_ur};

/// Variance within this of the mean, relative: Poisson.
const POISSON_WITHIN: f64 = 1e-6;

/// A whole number ≥ 0 with the given mean and variance: negative binomial when the variance exceeds the mean, Poisson when
/// they agree, binomial below.
///
/// Domain: mean > 0, variance > 0. Arguments out of the special functions' domain would be those of a law at its floor.
///
/// ```
/// use tailcast::numerics::two_moments::TwoMoments;
/// let poisson = TwoMoments { mean: 2.0, variance: 2.0 };
/// assert!((poisson.at_most(0.0) - (-2f64).exp()).abs() < 1e-14);
/// assert!((poisson.above(0.0) - (1.0 - (-2f64).exp())).abs() < 1e-14);
/// ```
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TwoMoments {
    /// Expected value.
    pub mean: f64,
    /// Variance.
    pub variance: f64,
}

impl TwoMoments {
    /// Whether mean and variance agree, within 10⁻⁶.
    pub fn is_poisson(&self) -> bool {
        (self.variance / self.mean - 1.0).abs() < POISSON_WITHIN
    }

    /// P(R ≤ x) for whole x ≥ 0.
    pub fn at_most(&self, x: f64) -> f64 {
        let ratio = self.variance / self.mean;
        if self.is_poisson() {
            checked_gamma_ur(x + 1.0, self.mean).unwrap_or(1.0)
        } else if ratio > 1.0 {
            checked_beta_reg(self.mean / (ratio - 1.0), x + 1.0, 1.0 / ratio).unwrap_or(1.0)
        } else {
            let trials = self.mean / (1.0 - ratio);
            if x >= trials { 1.0 } else { checked_beta_reg(trials - x, x + 1.0, ratio).unwrap_or(1.0) }
        }
    }

    /// P(R > x) for whole x ≥ 0, exact in the far tail.
    pub fn above(&self, x: f64) -> f64 {
        let ratio = self.variance / self.mean;
        if self.is_poisson() {
            checked_gamma_lr(x + 1.0, self.mean).unwrap_or(0.0)
        } else if ratio > 1.0 {
            checked_beta_reg(x + 1.0, self.mean / (ratio - 1.0), 1.0 - 1.0 / ratio).unwrap_or(0.0)
        } else {
            let trials = self.mean / (1.0 - ratio);
            if x >= trials { 0.0 } else { checked_beta_reg(x + 1.0, trials - x, 1.0 - ratio).unwrap_or(0.0) }
        }
    }
}

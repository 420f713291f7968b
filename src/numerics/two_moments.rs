//! Counting laws fitted to a mean and a variance.

use statrs::function::gamma::{checked_gamma_lr, checked_gamma_ur};

use super::binomial::{density, incomplete_beta, poisson_density};

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
            incomplete_beta(self.mean / (ratio - 1.0), x + 1.0, 1.0 / ratio, 1.0 - 1.0 / ratio)
        } else {
            let trials = self.mean / (1.0 - ratio);
            if x >= trials { 1.0 } else { incomplete_beta(trials - x, x + 1.0, ratio, 1.0 - ratio) }
        }
    }

    /// P(R ≤ x) − P(R ≤ x − 1) for whole x ≥ 0.
    ///
    /// ```
    /// use tailcast::numerics::two_moments::TwoMoments;
    /// let law = TwoMoments { mean: 2.0, variance: 3.0 };
    /// assert!((law.probability(4.0) - (law.at_most(4.0) - law.at_most(3.0))).abs() < 1e-15);
    /// ```
    pub fn probability(&self, x: f64) -> f64 {
        let ratio = self.variance / self.mean;
        if self.is_poisson() {
            return poisson_density(x, self.mean);
        }
        if ratio > 1.0 {
            let failures = self.mean / (ratio - 1.0);
            return failures / (failures + x) * density(x, failures + x, 1.0 - 1.0 / ratio, 1.0 / ratio);
        }
        let trials = self.mean / (1.0 - ratio);
        // Trials are no whole number: what the last step lacks to one is its own.
        if x < trials { density(x, trials, 1.0 - ratio, ratio) } else { 1.0 - self.at_most((x - 1.0).max(0.0)) }
    }

    /// P(R = x + 1)/P(R = x), where neither is 0: Panjer's recurrence, the same for the three laws.
    pub fn next_over(&self, x: f64) -> f64 {
        let ratio = if self.is_poisson() { 1.0 } else { self.variance / self.mean };
        (self.mean + (ratio - 1.0) * x) / (ratio * (x + 1.0))
    }

    /// P(R > x) for whole x ≥ 0, exact in the far tail.
    pub fn above(&self, x: f64) -> f64 {
        let ratio = self.variance / self.mean;
        if self.is_poisson() {
            checked_gamma_lr(x + 1.0, self.mean).unwrap_or(0.0)
        } else if ratio > 1.0 {
            incomplete_beta(x + 1.0, self.mean / (ratio - 1.0), 1.0 - 1.0 / ratio, 1.0 / ratio)
        } else {
            let trials = self.mean / (1.0 - ratio);
            if x >= trials { 0.0 } else { incomplete_beta(x + 1.0, trials - x, 1.0 - ratio, ratio) }
        }
    }

    /// P(R ≥ m), E[R; R ≥ m] and E[R²; R ≥ m] for whole m ≥ 0; without variance R is its mean.
    ///
    /// Formula: with ρ = variance/mean, E[R; R ≥ m] = μ·P(R' ≥ m−1) and E[R(R−1); R ≥ m] = μ(μ+ρ−1)·P(R'' ≥ m−2), where R' and R''
    /// have means μ+ρ−1 and μ+2(ρ−1) and the same ρ: the identities of the binomial, Poisson and negative binomial laws (Johnson,
    /// Kemp & Kotz 2005, from memory) in one.
    ///
    /// ```
    /// use tailcast::numerics::two_moments::TwoMoments;
    /// let [p, first, second] = TwoMoments { mean: 2.0, variance: 3.0 }.moments_from(0.0);
    /// assert!((p, first) == (1.0, 2.0) && (second - 7.0).abs() < 1e-12);
    /// ```
    pub fn moments_from(&self, m: f64) -> [f64; 3] {
        if self.mean <= 0.0 || self.variance <= 0.0 {
            return if m <= self.mean { [1.0, self.mean, self.mean * self.mean] } else { [0.0; 3] };
        }
        let excess = self.variance / self.mean - 1.0;
        let from = |steps: f64| {
            let mean = self.mean + steps * excess;
            match m - steps {
                m if m <= 0.0 => 1.0,
                _ if mean <= 0.0 => 0.0,
                m => Self { mean, variance: mean * (1.0 + excess) }.above(m - 1.0),
            }
        };
        let first = self.mean * from(1.0);
        [from(0.0), first, first + (self.mean * (self.mean + excess)).max(0.0) * from(2.0)]
    }
}

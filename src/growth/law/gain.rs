//! The generating function of what a node gains, from one starting degree or from a mixture of them.

use num_complex::Complex64;

use super::NodeLaw;
use crate::numerics::elementary::{complex_exp_m1, complex_ln_1p};
use crate::numerics::inversion::{GeneratingFamily, GeneratingFunction};

/// Exponents beyond this would over- or underflow.
const LARGE_EXPONENT: f64 = 600.0;

/// One starting degree.
const ALONE: &[(f64, f64)] = &[(0.0, 1.0)];

/// The gain X − k₀ of a node that starts at degree k₀ − b with weight w_b; weights add up to one.
///
/// Formula: `f^{k₀}·z^{−k₀} · Σ w_b·f^{−b} · e^{−immigration}`, f the generating function of one link's descendants.
pub(super) struct GainLaw<'a> {
    pub law: &'a NodeLaw,
    /// k₀, the largest starting degree.
    pub reference: f64,
    /// (b, w_b) in ascending b, the first with b = 0.
    pub below: &'a [(f64, f64)],
}

impl GainLaw<'_> {
    /// ln Σ w_b·e^{−b·ln f}.
    fn log_mixture(&self, log_f: Complex64) -> Complex64 {
        if self.below.len() == 1 {
            return Complex64::ZERO;
        }
        let deepest = self.below.last().map_or(0.0, |&(b, _)| b);
        let largest = (-deepest * log_f.re).max(0.0);
        if deepest * log_f.re.abs() > LARGE_EXPONENT {
            let sum: Complex64 = self.below.iter().map(|&(b, w)| w * (-b * log_f - largest).exp()).sum();
            return sum.ln() + largest;
        }
        let step = (-log_f).exp();
        let (mut sum, mut power, mut at) = (Complex64::ZERO, Complex64::ONE, 0.0);
        for &(b, w) in self.below {
            power = if b == at + 1.0 { power * step } else { (-b * log_f).exp() };
            at = b;
            sum += w * power;
        }
        sum.ln()
    }

    /// The same for real ln f, with the mean and variance of b under the tilted weights.
    fn real_mixture(&self, log_f: f64) -> [f64; 3] {
        if self.below.len() == 1 {
            return [0.0; 3];
        }
        let deepest = self.below.last().map_or(0.0, |&(b, _)| b);
        let largest = (-deepest * log_f).max(0.0);
        let [mut total, mut first, mut second] = [0.0; 3];
        for &(b, w) in self.below {
            let weight = w * (-b * log_f - largest).exp();
            total += weight;
            first += weight * b;
            second += weight * b * b;
        }
        let mean = first / total;
        [total.ln() + largest, mean, (second / total - mean * mean).max(0.0)]
    }
}

impl GeneratingFunction for GainLaw<'_> {
    fn log_at(&self, zeta: Complex64) -> Complex64 {
        let (absent, gained) = self.law.logs_at(zeta);
        if self.reference == 0.0 {
            return absent;
        }
        self.reference * gained + self.log_mixture(zeta + gained) + absent
    }

    fn log_real(&self, zeta: f64) -> [f64; 3] {
        let (y, slope) = (-zeta.exp_m1(), -zeta.exp());
        // Derivatives in y, then the chain rule with y' = y'' = −e^ζ.
        let by_zeta = |[value, first, second]: [f64; 3]| [value, first * slope, second * slope * slope + first * slope];
        let mut immigration = [0.0; 3];
        for panel in &self.law.panels {
            let terms = panel.real_integral(y);
            immigration = std::array::from_fn(|i| immigration[i] + terms[i]);
        }
        let [absent, absent_1, absent_2] = by_zeta(immigration);
        if self.reference == 0.0 {
            return [-absent, -absent_1, -absent_2];
        }
        let log_linear = |a: f64| {
            let slope = a / (1.0 + y * a);
            by_zeta([(y * a).ln_1p(), slope, -slope * slope])
        };
        let spread = log_linear(self.law.spread);
        let mut gained = [-spread[0], -spread[1], -spread[2]];
        if self.law.losses {
            let kept = log_linear(self.law.shortfall);
            gained = [gained[0] + kept[0] - zeta, gained[1] + kept[1] - 1.0, gained[2] + kept[2]];
        }
        let [mixture, mean, variance] = self.real_mixture(zeta + gained[0]);
        let link = 1.0 + gained[1];
        [
            self.reference * gained[0] + mixture - absent,
            self.reference * gained[1] - mean * link - absent_1,
            self.reference * gained[2] + variance * link * link - mean * gained[2] - absent_2,
        ]
    }

    fn singularity(&self) -> f64 {
        if self.law.spread > 0.0 { (1.0 / self.law.spread).ln_1p() } else { f64::INFINITY }
    }
}

/// The gains X − k of nodes that start at degree k.
impl GeneratingFamily for NodeLaw {
    fn member(&self, k: u64) -> impl GeneratingFunction {
        GainLaw { law: self, reference: k as f64, below: ALONE }
    }

    /// −immigration, and ln f − ζ.
    fn logs_at(&self, zeta: Complex64) -> (Complex64, Complex64) {
        let y = -complex_exp_m1(zeta);
        let immigration: Complex64 = self.panels.iter().map(|panel| panel.integral(y)).sum();
        // Without losses the ζ never enters, and nothing cancels.
        let kept = if self.losses { complex_ln_1p(y * self.shortfall) - zeta } else { Complex64::ZERO };
        (-immigration, kept - complex_ln_1p(y * self.spread))
    }
}

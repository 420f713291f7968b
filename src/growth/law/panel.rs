//! One panel of the immigration integral ∫ u·e^R·y/(1 + yC).

use num_complex::Complex64;

use crate::numerics::elementary::complex_ln_1p;
use crate::numerics::quadrature::PANEL_NODES;

/// A pole of the integrand within this many half-lengths of a panel is taken out and integrated in closed form; farther
/// away 10 Gauss–Legendre nodes are good to ρ^{−20} with ρ = 2 + √3, that is 4·10⁻¹².
const NEAR_POLE: f64 = 2.0;

/// One panel of the immigration integral, at its Gauss–Legendre nodes.
#[derive(Debug, Clone)]
pub(super) struct LawPanel {
    /// C at the nodes.
    pub spread: [f64; PANEL_NODES],
    /// Weight × u·e^R at the nodes: immigrants and their expected offspring.
    pub immigration: [f64; PANEL_NODES],
    /// Weight × v·e^R at the nodes.
    pub births: [f64; PANEL_NODES],
    /// u/v at the nodes.
    pub ratio: [f64; PANEL_NODES],
    /// Barycentric weights of interpolation in C.
    pub barycentric: [f64; PANEL_NODES],
    /// C at the panel's start and end.
    pub ends: (f64, f64),
}

impl LawPanel {
    /// ∫ u·e^R·y/(1 + yC) over the panel and its first two derivatives in y, for real y above the pole −1/C. The
    /// derivatives hold the interpolated u/v fixed: they only steer the search for the saddle point.
    pub fn real_integral(&self, y: f64) -> [f64; 3] {
        let mut sums = [0.0; 3];
        let mut add = |weight: f64, spread: f64| {
            let inverse = 1.0 / (1.0 + y * spread);
            let density = weight * inverse * inverse;
            sums[0] += weight * y * inverse;
            sums[1] += density;
            sums[2] -= 2.0 * density * spread * inverse;
        };
        let (middle, half) = (0.5 * (self.ends.0 + self.ends.1), 0.5 * (self.ends.0 - self.ends.1));
        let near = (1.0 + y * middle).abs() < NEAR_POLE * half * y.abs();
        let mut ratio = 0.0;
        if near {
            let (mut weighted, mut plain) = (0.0, 0.0);
            for i in 0..PANEL_NODES {
                let weight = self.barycentric[i] / (1.0 + y * self.spread[i]);
                weighted += weight * self.ratio[i];
                plain += weight;
            }
            ratio = weighted / plain;
        }
        for i in 0..PANEL_NODES {
            add(self.immigration[i] - ratio * self.births[i], self.spread[i]);
        }
        if near {
            for (spread, sign) in [(self.ends.0, ratio), (self.ends.1, -ratio)] {
                let slope = spread / (1.0 + y * spread);
                sums[0] += sign * (y * spread).ln_1p();
                sums[1] += sign * slope;
                sums[2] -= sign * slope * slope;
            }
        }
        sums
    }

    /// ∫ u·e^R·y/(1 + yC) over the panel.
    pub fn integral(&self, y: Complex64) -> Complex64 {
        let inverse: [Complex64; PANEL_NODES] = std::array::from_fn(|i| (1.0 + y * self.spread[i]).inv());
        let sum =
            |weights: &[f64; PANEL_NODES]| -> Complex64 { inverse.iter().zip(weights).map(|(d, &w)| d * w).sum() };
        let plain = y * sum(&self.immigration);
        let (middle, half) = (0.5 * (self.ends.0 + self.ends.1), 0.5 * (self.ends.0 - self.ends.1));
        if (1.0 + y * middle).norm() >= NEAR_POLE * half * y.norm() {
            return plain;
        }
        // u/v interpolated at the pole C = −1/y, where 1/(C − C_i) is −y·inverse[i].
        let weighted: [f64; PANEL_NODES] = std::array::from_fn(|i| self.barycentric[i] * self.ratio[i]);
        let ratio = sum(&weighted) / sum(&self.barycentric);
        let exact = complex_ln_1p(y * self.ends.0) - complex_ln_1p(y * self.ends.1);
        plain + ratio * (exact - y * sum(&self.births))
    }
}

/// Weights of barycentric interpolation at `nodes`, scaled by their spread so that products neither over- nor underflow.
pub(super) fn barycentric_weights(nodes: &[f64; PANEL_NODES], scale: f64) -> [f64; PANEL_NODES] {
    std::array::from_fn(|i| {
        1.0 / nodes
            .iter()
            .enumerate()
            .filter(|&(j, _)| j != i)
            .map(|(_, &x)| 4.0 * (nodes[i] - x) / scale)
            .product::<f64>()
    })
}

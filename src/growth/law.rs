//! The law of one node's degree: the exact distribution of where a node stands after some days.

use num_complex::Complex64;

use super::mean_field::{Course, GrowthError};
use crate::numerics::elementary::complex_ln_1p;
use crate::numerics::inversion::{GeneratingFunction, InversionError, upper_tail};
use crate::numerics::quadrature::{PANEL, PANEL_NODES};
use crate::numerics::tolerances::Accuracy;

/// A pole of the integrand within this many half-lengths of a panel is taken out and integrated in closed form; farther
/// away 10 Gauss–Legendre nodes are good to ρ^{−20} with ρ = 2 + √3, that is 4·10⁻¹².
const NEAR_POLE: f64 = 2.0;

/// The law of a node's degree at day t given its degree at day s: a time-inhomogeneous linear birth, death and
/// immigration process (Kendall 1948).
///
/// Formula, with y = 1 − z, R(x) = ∫ₓᵗ (v−w), C(x) = ∫ₓᵗ v·e^{R}, E = e^{R(s)}, C = C(s), D = C − E:
///
/// `E[z^X | k] = ((1 + yD)/(1 + yC))^k · exp(−∫ₛᵗ u·e^{R(x)}·y/(1 + y·C(x)) dx)`
///
/// where v = p·L/K, u = (1−p)·L/N and w is the loss hazard of a link end; without losses D = −1. At constant u/v this is
/// the negative binomial `k + NB(k + u/v, e^{−V})`; as p → 0 it becomes Poisson, with no special case.
///
/// # Numerical notes
/// The integral is Gauss–Legendre on the panels of the course's mesh. A pole of the integrand that comes near a panel
/// (it does at the saddle point of a far tail) is subtracted: its residue is the interpolant of u/v there, and its own
/// integral is a logarithm. Tails are within 10⁻⁸ of the master equation, down to 10⁻¹² and below
/// (`tests/core/law.rs`).
///
/// ```
/// use tailcast::growth::{Course, NodeLaw};
/// use tailcast::model::*;
/// // Uniform attachment: a node that starts with no link has a Poisson number, here with mean ln(N₁/N₀)·ℓ.
/// let forces = GrowthParameters::new(
///     DegreeKind::Received, AttachmentMix::UNIFORM, ArrivalPlan::constant(1.0).unwrap(), EntryDegrees::single(0), 2.0,
/// ).unwrap();
/// let counts = DegreeCounts::from_pairs(&[(0, 100)]).unwrap();
/// let course = Course::new(&counts, forces, 100.0).unwrap();
/// let law = NodeLaw::between(&course, 0.0, 100.0);
/// let mean = 2.0 * 2f64.ln();
/// assert!((law.mean(0) - mean).abs() < 1e-12);
/// assert!((law.tail(0, 1).unwrap() - (1.0 - (-mean).exp())).abs() < 1e-12);
/// ```
#[derive(Debug, Clone)]
pub struct NodeLaw {
    /// E: expected links at t from one link at s.
    expansion: f64,
    /// C at s; the generating function is singular at z = 1 + 1/C.
    spread: f64,
    /// D = C − E; −1 without losses.
    shortfall: f64,
    losses: bool,
    panels: Vec<LawPanel>,
}

/// One panel of the immigration integral, at its Gauss–Legendre nodes.
#[derive(Debug, Clone)]
struct LawPanel {
    /// C at the nodes.
    spread: [f64; PANEL_NODES],
    /// Weight × u·e^R at the nodes: immigrants and their expected offspring.
    immigration: [f64; PANEL_NODES],
    /// Weight × v·e^R at the nodes.
    births: [f64; PANEL_NODES],
    /// u/v at the nodes.
    ratio: [f64; PANEL_NODES],
    /// Barycentric weights of interpolation in C.
    barycentric: [f64; PANEL_NODES],
    /// C at the panel's start and end.
    ends: (f64, f64),
}

impl NodeLaw {
    /// The law from day `from` to day `to` of a course.
    pub fn between(course: &Course, from: f64, to: f64) -> Self {
        let loss = course.parameters().end_loss_hazard();
        let edges = course.edges(from, to);
        let mut law = Self {
            expansion: 1.0,
            spread: 0.0,
            shortfall: -1.0,
            losses: loss > 0.0,
            panels: Vec::with_capacity(edges.len()),
        };
        let mut exponent = 0.0; // R at the end of the panel in hand
        for pair in edges.windows(2).rev() {
            let (start, days) = (pair[0], pair[1] - pair[0]);
            let hazards = PANEL.nodes.map(|x| course.hazards(start + days * x));
            let births = hazards.map(|h| h.preferential);
            let integral = |values: &[f64; PANEL_NODES], weights: &[f64; PANEL_NODES]| -> f64 {
                days * values.iter().zip(weights).map(|(value, weight)| value * weight).sum::<f64>()
            };
            let expansion: [f64; PANEL_NODES] = std::array::from_fn(|i| {
                let remaining = 1.0 - PANEL.nodes[i];
                (exponent + integral(&births, &PANEL.to_right[i]) - loss * days * remaining).exp()
            });
            let born: [f64; PANEL_NODES] = std::array::from_fn(|i| births[i] * expansion[i]);
            let spread: [f64; PANEL_NODES] = std::array::from_fn(|i| law.spread + integral(&born, &PANEL.to_right[i]));
            let start_spread = law.spread + integral(&born, &PANEL.weights);
            let scale = (start_spread - law.spread).max(f64::MIN_POSITIVE);
            law.panels.push(LawPanel {
                spread,
                immigration: std::array::from_fn(|i| PANEL.weights[i] * days * hazards[i].uniform * expansion[i]),
                births: std::array::from_fn(|i| PANEL.weights[i] * days * born[i]),
                ratio: hazards.map(|h| h.ratio),
                barycentric: barycentric_weights(&spread, scale),
                ends: (start_spread, law.spread),
            });
            law.spread = start_spread;
            law.shortfall += loss * integral(&expansion, &PANEL.weights);
            exponent += integral(&births, &PANEL.weights) - loss * days;
        }
        law.expansion = exponent.exp();
        law
    }

    /// Probability that a node of degree `degree` at the start has at least `threshold` at the end, given that it stays.
    ///
    /// # Errors
    /// [`GrowthError::Inversion`] when the contour sums do not settle.
    pub fn tail(&self, degree: u64, threshold: u64) -> Result<f64, GrowthError> {
        self.tail_within(degree, threshold, Accuracy::Full)
    }

    /// [`Self::tail`] to a stated accuracy.
    ///
    /// # Errors
    /// [`GrowthError::Inversion`] when the contour sums do not settle.
    pub fn tail_within(&self, degree: u64, threshold: u64, accuracy: Accuracy) -> Result<f64, GrowthError> {
        if threshold == 0 || (!self.losses && degree >= threshold) {
            return Ok(1.0);
        }
        let gain = threshold as f64 - degree as f64;
        let still = self.mean_gain_from_uniform() == 0.0 && (degree == 0 || (self.spread == 0.0 && !self.losses));
        if still {
            return Ok(0.0);
        }
        let law = GainLaw { law: self, degree: degree as f64 };
        upper_tail(&law, gain, accuracy).map_err(|error: InversionError| error.into())
    }

    /// Expected degree at the end of a node of degree `degree` at the start.
    pub fn mean(&self, degree: u64) -> f64 {
        degree as f64 * self.expansion + self.mean_gain_from_uniform()
    }

    /// Variance of the degree at the end of a node of degree `degree` at the start.
    pub fn variance(&self, degree: u64) -> f64 {
        let of_one_link = self.expansion * (2.0 * self.spread - self.expansion + 1.0);
        let of_immigrants: f64 = self.nodes().map(|(spread, immigration)| immigration * (2.0 * spread + 1.0)).sum();
        degree as f64 * of_one_link + of_immigrants
    }

    fn mean_gain_from_uniform(&self) -> f64 {
        self.nodes().map(|(_, immigration)| immigration).sum()
    }

    fn nodes(&self) -> impl Iterator<Item = (f64, f64)> + '_ {
        self.panels.iter().flat_map(|p| p.spread.iter().copied().zip(p.immigration.iter().copied()))
    }
}

impl LawPanel {
    /// ∫ u·e^R·y/(1 + yC) over the panel and its first two derivatives in y, for real y above the pole −1/C. The
    /// derivatives hold the interpolated u/v fixed: they only steer the search for the saddle point.
    fn real_integral(&self, y: f64) -> [f64; 3] {
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
    fn integral(&self, y: Complex64) -> Complex64 {
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

/// The gain X − k of a node that starts at degree k.
struct GainLaw<'a> {
    law: &'a NodeLaw,
    degree: f64,
}

impl GeneratingFunction for GainLaw<'_> {
    fn log_at(&self, zeta: Complex64) -> Complex64 {
        let y = -crate::numerics::elementary::complex_exp_m1(zeta);
        let immigration: Complex64 = self.law.panels.iter().map(|panel| panel.integral(y)).sum();
        if self.degree == 0.0 {
            return -immigration;
        }
        let kept = if self.law.losses { complex_ln_1p(y * self.law.shortfall) - zeta } else { Complex64::ZERO };
        self.degree * (kept - complex_ln_1p(y * self.law.spread)) - immigration
    }

    fn log_real(&self, zeta: f64) -> [f64; 3] {
        let (y, slope) = (-zeta.exp_m1(), -zeta.exp());
        // Derivatives in y of ln f and of the immigration integral, then the chain rule with y' = y'' = −e^ζ.
        let [mut value, mut first, mut second] = [0.0; 3];
        for panel in &self.law.panels {
            let [integral, once, twice] = panel.real_integral(y);
            (value, first, second) = (value - integral, first - once, second - twice);
        }
        let (c, d) = (self.law.spread, self.law.shortfall);
        let c_inverse = c / (1.0 + y * c);
        let mut shift = 0.0;
        value -= self.degree * (y * c).ln_1p();
        first -= self.degree * c_inverse;
        second += self.degree * c_inverse * c_inverse;
        if self.law.losses {
            let d_inverse = d / (1.0 + y * d);
            value += self.degree * ((y * d).ln_1p() - zeta);
            first += self.degree * d_inverse;
            second -= self.degree * d_inverse * d_inverse;
            shift = self.degree;
        }
        [value, first * slope - shift, second * slope * slope + first * slope]
    }

    fn singularity(&self) -> f64 {
        if self.law.spread > 0.0 { (1.0 / self.law.spread).ln_1p() } else { f64::INFINITY }
    }
}

/// Weights of barycentric interpolation at `nodes`, scaled by their spread so that products neither over- nor underflow.
fn barycentric_weights(nodes: &[f64; PANEL_NODES], scale: f64) -> [f64; PANEL_NODES] {
    std::array::from_fn(|i| {
        1.0 / nodes
            .iter()
            .enumerate()
            .filter(|&(j, _)| j != i)
            .map(|(_, &x)| 4.0 * (nodes[i] - x) / scale)
            .product::<f64>()
    })
}

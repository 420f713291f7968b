//! One contour for many tails: those of variables whose generating functions are powers of one another, but for a common factor.

use std::f64::consts::PI;

use num_complex::Complex64;

use super::{Crossing, GeneratingFunction, PRESSED, Saddle, Side};
use crate::numerics::elementary::complex_exp_m1;
use crate::numerics::tolerances::{Accuracy, CONTOUR_AGREEMENT};
use crate::numerics::work::{Work, did};

/// Variables G_k, k a whole number, with `ln E[e^{ζ·G_k}] = common(ζ) + k·unit(ζ)`.
pub trait GeneratingFamily {
    /// The generating function of G_k.
    fn member(&self, k: u64) -> impl GeneratingFunction;
    /// common(ζ) and unit(ζ) on any continuous branches.
    fn logs_at(&self, zeta: Complex64) -> (Complex64, Complex64);
}

/// Points are taken until the integrand has fallen to this share of its peak: for members whose integrand dies later.
const DEAD: f64 = 1e-22;
/// What the last point may still add, relative.
const CUT_OFF: f64 = 1e-13;
/// Least sum of terms, in units of the largest: the rest cancels, and six of sixteen digits may go.
const LEAST_SUM: f64 = 1e-6;
/// Least probability that is had as one minus its complement, for members but the first.
const LEAST_COMPLEMENT: f64 = 0.01;
/// Most points: an integrand that needs more is not shared.
const MOST_POINTS: usize = 1 << 10;
/// Members that are reached by products before the exponentials are taken anew.
const MOST_PRODUCTS: u32 = 128;

/// The contour through the saddle point of one member, with the integrand there of the last member that was asked for.
///
/// Formula: with `P(G_k ≥ j − k) = (1/2πi)∮ e^{common + k·(unit + ζ) − (j−1)ζ}/(e^ζ − 1) dζ` (see [`super::upper_tail`]) the integrand of
/// member k + d is that of k times `e^{d·(unit + ζ)}`, point by point.
///
/// # Numerical notes
/// Away from its own saddle point an integrand is larger than its integral and cancels; a member that loses more than six digits, whose
/// two trapezoid sums disagree, or that has not died where the points end, is refused. Cost: one complex product a point and
/// member while the step d stays the same.
#[derive(Debug)]
pub struct SharedContour {
    side: Side,
    /// The member in hand, and the factor its terms are scaled by.
    member: u64,
    log_scale: f64,
    /// unit + ζ at the saddle point: by how much the scale grows from one member to the next.
    slope: f64,
    /// The integrand relative to its value on the real axis, weights included.
    terms: Vec<Complex64>,
    /// unit + ζ less its value at the saddle point.
    units: Vec<Complex64>,
    /// The step last taken and its factors.
    step: i64,
    factors: Vec<Complex64>,
    products: u32,
    /// 1/(number of steps to π), of the finer sum.
    weight: f64,
    accuracy: Accuracy,
}

impl SharedContour {
    /// The contour of member `k` of a family for P(G_k ≥ j − k), and that probability; none where it has none that can be shared.
    pub fn through(family: &impl GeneratingFamily, k: u64, j: u64, accuracy: Accuracy) -> Option<(Self, f64)> {
        let gf = family.member(k);
        let g = j as f64 - k as f64;
        let Crossing::At(saddle) = super::crossing(&gf, g) else { return None };
        let by_curvature = saddle.curvature.sqrt().recip();
        let to_singularity = (gf.singularity() - saddle.zeta).max(PRESSED * by_curvature);
        if to_singularity < by_curvature {
            // Close to a weak singularity other members' saddle points are elsewhere.
            return None;
        }
        let halved = if accuracy == Accuracy::Full { 2.0 } else { 1.0 };
        let panels = halved * (PI / (accuracy.contour_step() * by_curvature)).ceil().max(16.0);
        let along = |bend: f64| Self::along(family, (k, g), &saddle, bend, panels, accuracy);
        let contour = along(0.25 / to_singularity).or_else(|| along(0.0))?;
        let first = contour.probability()?;
        Some((contour, first))
    }

    /// P(G_k ≥ j − k) of another member, in some order; none where this contour does not serve it.
    pub fn tail(&mut self, k: u64) -> Option<f64> {
        self.move_to(k);
        self.probability().filter(|&tail| self.side == Side::Upper || tail > LEAST_COMPLEMENT)
    }

    fn along(
        family: &impl GeneratingFamily,
        (k, g): (u64, f64),
        saddle: &Saddle,
        bend: f64,
        panels: f64,
        accuracy: Accuracy,
    ) -> Option<Self> {
        let (mut terms, mut units, mut quiet, mut slope) = (Vec::new(), Vec::new(), 0, 0.0);
        let enough_quiet = if bend > 0.0 { 2 } else { 16 };
        for index in 0..=panels as usize {
            if index > MOST_POINTS {
                return None;
            }
            let x = index as f64 * PI / panels;
            let zeta = Complex64::new(saddle.zeta + bend * x * x, x);
            let (common, unit) = family.logs_at(zeta);
            let exponent = common + k as f64 * unit - (g - 1.0) * zeta - saddle.reference;
            let tilt = Complex64::new(1.0, -2.0 * bend * x);
            let term = exponent.exp() * tilt * (saddle.pole / complex_exp_m1(zeta));
            let end = index == 0 || index == panels as usize;
            if index == 0 {
                slope = (unit + zeta).re;
            }
            terms.push(if end { 0.5 * term } else { term });
            units.push(unit + zeta - slope);
            quiet = if term.norm_sqr() > DEAD * DEAD { 0 } else { quiet + 1 };
            if quiet >= enough_quiet {
                break;
            }
        }
        if bend > 0.0 && quiet < enough_quiet {
            return None; // It leaves the strip alive.
        }
        let count = terms.len();
        did(Work::ContourPoints, count as u64);
        Some(Self {
            side: saddle.side,
            member: k,
            log_scale: saddle.height,
            slope,
            terms,
            units,
            step: 0,
            factors: vec![Complex64::ONE; count],
            products: 0,
            weight: panels.recip(),
            accuracy,
        })
    }

    fn move_to(&mut self, k: u64) {
        let step = k as i64 - self.member as i64;
        if step != self.step || self.products >= MOST_PRODUCTS {
            self.factors.iter_mut().zip(&self.units).for_each(|(factor, unit)| *factor = (step as f64 * unit).exp());
            (self.step, self.products) = (step, 0);
        }
        self.terms.iter_mut().zip(&self.factors).for_each(|(term, factor)| *term *= factor);
        self.products += 1;
        did(Work::ContourPoints, self.terms.len() as u64);
        self.log_scale += step as f64 * self.slope;
        self.member = k;
    }

    fn probability(&self) -> Option<f64> {
        let (mut even, mut odd) = (0.0, 0.0);
        for pair in self.terms.chunks(2) {
            even += pair[0].re;
            odd += pair.get(1).map_or(0.0, |term| term.re);
        }
        let sum = even + odd;
        let last = self.terms.last().map_or(0.0, |term| term.norm_sqr());
        let settled = self.accuracy == Accuracy::Working || (2.0 * even - sum).abs() <= CONTOUR_AGREEMENT * sum.abs();
        let sound = sum > LEAST_SUM && settled && last <= (CUT_OFF * sum).powi(2);
        let value = sum * self.weight * self.log_scale.exp();
        let tail = if self.side == Side::Upper { value } else { 1.0 - value };
        sound.then(|| tail.clamp(0.0, 1.0))
    }
}

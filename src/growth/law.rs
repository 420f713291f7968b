//! The law of one node's degree: the exact distribution of where a node stands after some days.

mod classes;
mod gain;
mod mixed;
mod panel;
mod steady;

pub(crate) use mixed::MixedLaw;

use gain::GainLaw;
use panel::{LawPanel, barycentric_weights};
use statrs::function::beta::checked_beta_reg;
pub(crate) use steady::SteadyLaw;

use super::mean_field::{Course, GrowthError};
use crate::numerics::inversion::{rare_upper_tail, upper_tail};
use crate::numerics::quadrature::{PANEL, PANEL_NODES};
use crate::numerics::tolerances::{Accuracy, MESH_LOG_CHANGE};
use crate::numerics::two_moments::TwoMoments;

/// Expected gains below this are none.
const NEVER: f64 = 1e-280;
/// Below this shape (u/v, for a node without links) nearly all of the law lies at no gain, and the rest is a logarithmic series.
const RARE_SHAPE: f64 = 0.01;
/// Relative drift of u/v below which it is constant: the closed form is then as exact as the inversion.
const CONSTANT: f64 = 1e-12;
/// Once a link's expected descendants are fewer than e^{−50}, what came before leaves no trace in double precision.
const FORGOTTEN: f64 = -50.0;

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
    /// The closed form, where there is one.
    steady: Option<SteadyLaw>,
}

impl NodeLaw {
    /// The law from day `from` to day `to` of a course, for an active node of growth factor one.
    pub fn between(course: &Course, from: f64, to: f64) -> Self {
        Self::of_group(course, 1.0, from, to, to)
    }

    /// The law from day `from` to day `to` of a node that gains no link.
    pub(crate) fn gainless(course: &Course, from: f64, to: f64) -> Self {
        Self::of_group(course, 0.0, from, from, to)
    }

    /// The law from day `from` to day `to` of a node with growth factor `factor` that falls dormant at day `until`, and from
    /// then on only loses links.
    pub(crate) fn of_group(course: &Course, factor: f64, from: f64, until: f64, to: f64) -> Self {
        let loss = course.parameters().end_loss_hazard();
        let edges = if until > from { split(course, &course.edges(from, until), factor) } else { Vec::new() };
        let dormant_expansion = (-loss * (to - until)).exp();
        let mut law = Self {
            expansion: dormant_expansion,
            spread: 0.0,
            shortfall: -dormant_expansion,
            losses: loss > 0.0,
            panels: Vec::with_capacity(edges.len()),
            steady: None,
        };
        let mut exponent = -loss * (to - until); // R at the end of the panel in hand
        for pair in edges.windows(2).rev() {
            let (start, days) = (pair[0], pair[1] - pair[0]);
            let hazards = PANEL.nodes.map(|x| course.hazards(start + days * x, factor));
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
            if exponent < FORGOTTEN {
                break;
            }
        }
        law.expansion = exponent.exp();
        law.steady = law.closed_form();
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
        self.mixture_tail(&[(degree, 1.0)], threshold, accuracy)
    }

    /// The same for a node whose degree at the start is drawn from `starts`: (degree, share) in ascending degree.
    ///
    /// # Numerical notes
    /// One inversion whatever the number of starting degrees.
    ///
    /// # Errors
    /// [`GrowthError::Inversion`] when the contour sums do not settle.
    pub fn mixture_tail(&self, starts: &[(u64, f64)], threshold: u64, accuracy: Accuracy) -> Result<f64, GrowthError> {
        if threshold == 0 {
            return Ok(1.0);
        }
        if self.is_still() {
            return Ok(starts.iter().map(|&(degree, share)| share * self.tail_of_losses(degree, threshold)).sum());
        }
        let open = if self.losses { starts.len() } else { starts.partition_point(|&(degree, _)| degree < threshold) };
        let certain: f64 = starts[open..].iter().map(|&(_, share)| share).sum();
        let Some(&(reference, _)) = starts[..open].last() else { return Ok(certain) };
        // Markov: a gain whose expectation is this small has no probability that a double could hold.
        let offspring = if self.losses { self.expansion } else { self.spread };
        if self.mean_gain_from_uniform() + reference as f64 * offspring < NEVER {
            return Ok(certain);
        }
        if let Some(steady) = self.steady {
            let mut tail = certain;
            let degrees: Vec<u64> = starts[..open].iter().map(|&(degree, _)| degree).collect();
            steady.tails(&degrees, threshold, |place, own| tail += starts[place].1 * own);
            return Ok(tail);
        }
        let share: f64 = starts[..open].iter().map(|&(_, share)| share).sum();
        let below = |&(degree, weight): &(u64, f64)| ((reference - degree) as f64, weight / share);
        let below: Vec<(f64, f64)> = starts[..open].iter().rev().map(below).collect();
        let law = GainLaw { law: self, reference: reference as f64, below: &below };
        let gain = threshold as f64 - reference as f64;
        let rare = below.len() == 1 && self.gains_seldom(reference);
        // A network that starts without any link bends u/v too much for the rare form; the common one serves it.
        let rare = if rare { rare_upper_tail(&law, gain, accuracy).ok() } else { None };
        let tail = rare.map_or_else(|| upper_tail(&law, gain, accuracy), Ok);
        Ok(certain + share * tail?)
    }

    /// Whether nothing lands: there is no panel, or panels of nothing.
    fn is_still(&self) -> bool {
        self.spread == 0.0 && self.mean_gain_from_uniform() == 0.0
    }

    /// Whether nearly all of the law of a node of degree `degree` lies at no gain. Without losses the gain starts at 0, and its mean over
    /// the spread is the law's shape.
    fn gains_seldom(&self, degree: u64) -> bool {
        !self.losses && self.mean(degree) - (degree as f64) < RARE_SHAPE * self.spread
    }

    /// The closed form, where no link is lost and u/v is constant, or every link lands uniformly.
    fn closed_form(&self) -> Option<SteadyLaw> {
        let law = SteadyLaw { uniform: self.mean_gain_from_uniform(), spread: self.spread };
        let constant = law.uniform / law.spread;
        let drifts = |&ratio: &f64| (ratio - constant).abs() > CONSTANT * constant;
        let steady = law.spread == 0.0 || !self.panels.iter().flat_map(|panel| &panel.ratio).any(drifts);
        (steady && !self.losses).then_some(law)
    }

    /// See [`SteadyLaw`]; none where the law has no closed form.
    pub(crate) fn steady(&self) -> Option<SteadyLaw> {
        self.steady
    }

    /// P(at least `threshold` of `degree` links are kept), for a node that gains none: binomial.
    fn tail_of_losses(&self, degree: u64, threshold: u64) -> f64 {
        match (degree.checked_sub(threshold), self.expansion < 1.0) {
            (None, _) => 0.0,
            (Some(_), false) => 1.0,
            (Some(spare), true) => {
                checked_beta_reg(threshold as f64, spare as f64 + 1.0, self.expansion).unwrap_or(0.0)
            }
        }
    }

    /// Whether links may be lost.
    pub(crate) fn can_fall(&self) -> bool {
        self.losses
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

    /// P(X ≥ j), E[X; X ≥ j] and E[X²; X ≥ j] of a node that starts with `degree` links, given that it stays, by the counting law with
    /// its mean and variance: exact at constant u/v without losses.
    pub(crate) fn moments_above(&self, degree: u64, threshold: u64) -> [f64; 3] {
        let floor = if self.losses { 0 } else { degree };
        let rest = TwoMoments { mean: self.mean(degree) - floor as f64, variance: self.variance(degree) };
        let [p, first, second] = rest.moments_from(threshold.saturating_sub(floor) as f64);
        let floor = floor as f64;
        [p, floor * p + first, floor * floor * p + 2.0 * floor * first + second]
    }

    fn mean_gain_from_uniform(&self) -> f64 {
        self.nodes().map(|(_, immigration)| immigration).sum()
    }

    fn nodes(&self) -> impl Iterator<Item = (f64, f64)> + '_ {
        self.panels.iter().flat_map(|p| p.spread.iter().copied().zip(p.immigration.iter().copied()))
    }
}

/// The mesh is made for nodes of growth factor one: where a faster one gains much, panels must be shorter, or the
/// interpolation in C breaks down.
fn split(course: &Course, edges: &[f64], factor: f64) -> Vec<f64> {
    /// Most pieces of a panel; gains beyond what they resolve are beyond any network's.
    const MOST_PIECES: f64 = 64.0;
    let mut finer = edges.first().copied().into_iter().collect::<Vec<_>>();
    for pair in edges.windows(2) {
        let days = pair[1] - pair[0];
        let gain = if factor > 1.0 { course.hazards(pair[0] + 0.5 * days, factor).preferential * days } else { 0.0 };
        let pieces = (gain / MESH_LOG_CHANGE).ceil().clamp(1.0, MOST_PIECES);
        finer.extend((1..pieces as u32).map(|i| pair[0] + days * f64::from(i) / pieces));
        finer.push(pair[1]);
    }
    finer
}

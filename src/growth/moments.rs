//! Node laws by mean and variance, for kernels that have no exact law.

use differential_equations::prelude::{ExplicitRungeKutta, IVP};

use super::mean_field::{Course, GrowthError};
use crate::model::DegreeCounts;
use crate::numerics::quadrature::PANEL;
use crate::numerics::tolerances::ODE_TOLERANCE;
use crate::numerics::two_moments::TwoMoments;

/// Newcomers' entry degrees are taken one by one up to so many distinct ones, and in cells of a tenth above.
const MOST_ENTRIES: usize = 24;
const CELL_GROWTH: f64 = 1.1;

/// Mean and variance of the degree of every present class and every cohort of newcomers at one day.
///
/// Formula (linear-noise approximation with the mean corrected for curvature): with the gain hazard
/// `λ(k) = L·[(1−p)/N + p·φ(k)/Σφ]`, φ(k) = k^γ, and the loss hazard w of an end,
/// `dm/dt = λ(m) + ½λ''(m)·V − w·m` and `dV/dt = 2(λ'(m) − w)·V + λ + w·m`.
///
/// # Numerical notes
/// 8th order Runge–Kutta of Dormand and Prince to 10⁻¹¹ a step, all classes and cohorts together, from each cohort's arrival
/// to the next's. Σφ is closed as K·(Σφ/Σk), both sums over the same classes, so that at γ = 1 the equations are exact: they
/// then give the mean and variance of [`super::NodeLaw`] to 10⁻⁸. Each node's law is the negative binomial (Poisson, binomial)
/// with these moments. Against simulation, expected tails at γ of 0.7 to 1.2 were within 5 % (`tests/core/forces.rs`).
#[derive(Debug, Clone)]
pub struct MomentLaw {
    present: Vec<Class>,
    cohorts: Vec<Class>,
    losses: bool,
}

/// Nodes that started alike.
#[derive(Debug, Clone, Copy)]
struct Class {
    /// Degree at the start.
    start: f64,
    /// Expected number of nodes, at the start for present ones, at the end for newcomers.
    nodes: f64,
    /// Day of arrival; 0 for present ones.
    since: f64,
    mean: f64,
    variance: f64,
}

/// k^γ, and k itself up to 1: what a node of degree `degree` weighs for preferential ends.
pub(crate) fn power_kernel(degree: f64, exponent: f64) -> f64 {
    if degree <= 1.0 { degree } else { degree.powf(exponent) }
}

/// φ with its first two derivatives: k^γ from 1 on, and k below. Between whole degrees any curve serves; below 1 the straight
/// line gives the mean of φ over a node that has no link yet or one.
fn kernel(k: f64, exponent: f64) -> [f64; 3] {
    if k <= 1.0 { [k, 1.0, 0.0] } else { power(k, exponent) }
}

fn power(k: f64, exponent: f64) -> [f64; 3] {
    let power = k.powf(exponent);
    [power, exponent * power / k, exponent * (exponent - 1.0) * power / (k * k)]
}

impl MomentLaw {
    /// Moments at `day` of the network with `counts` at day 0 of `course`.
    ///
    /// # Errors
    /// [`GrowthError::Integration`] when the solver gives up.
    pub fn solve(course: &Course, counts: &DegreeCounts, day: f64) -> Result<Self, GrowthError> {
        let class = |start: f64, nodes, since| Class { start, nodes, since, mean: start, variance: 0.0 };
        let present: Vec<Class> = counts.iter().map(|(k, n)| class(k as f64, n as f64, 0.0)).collect();
        let entries = entry_cells(course);
        let mut cohorts = Vec::new();
        for pair in course.arrival_edges(day).windows(2) {
            for (x, w) in PANEL.nodes.iter().zip(&PANEL.weights) {
                let since = pair[0] + (pair[1] - pair[0]) * x;
                let arrived = w * (pair[1] - pair[0]) * course.parameters().arrivals.rate(since);
                cohorts.extend(entries.iter().map(|&(degree, share)| class(degree, arrived * share, since)));
            }
        }
        let mut law = Self { present, cohorts, losses: course.parameters().end_loss_hazard() > 0.0 };
        let mut stops: Vec<f64> = law.cohorts.iter().map(|class| class.since).collect();
        stops.dedup();
        stops.push(day);
        let mut from = 0.0;
        for to in stops {
            law.advance(course, from, to)?;
            from = to;
        }
        for class in &mut law.cohorts {
            class.nodes *= course.survival(day - class.since);
        }
        Ok(law)
    }

    /// Integrates the classes there by day `from` up to day `to`.
    fn advance(&mut self, course: &Course, from: f64, to: f64) -> Result<(), GrowthError> {
        let arrived = self.cohorts.partition_point(|class| class.since <= from);
        let classes: Vec<Class> = self.present.iter().chain(&self.cohorts[..arrived]).copied().collect();
        let forces = course.parameters();
        let (p, gamma, loss) = (forces.mix.preferential_share(), forces.kernel_exponent(), forces.end_loss_hazard());
        // State: each class's gain m − k₀, which keeps its digits beside a large k₀, then its variance.
        // Time runs from 0 to 1: the solver lands on a whole 1 exactly, and on a day only nearly.
        let days = to - from;
        let slope = |part: f64, y: &Vec<f64>, dy: &mut Vec<f64>| {
            let time = from + days * part;
            let (nodes, link_ends) = course.totals(time);
            let landing = course.landing(time, nodes);
            let (mut by_kernel, mut by_degree) = (0.0, 0.0);
            for (class, moments) in classes.iter().zip(y.chunks_exact(2)) {
                let mean = class.start + moments[0];
                let [phi, _, bend] = kernel(mean, gamma);
                let weight = class.nodes * course.survival(time - class.since);
                by_kernel += weight * (phi + 0.5 * bend * moments[1]).max(0.0);
                by_degree += weight * mean;
            }
            let uniform = (1.0 - p) * landing / nodes;
            let attracted =
                if p > 0.0 && by_kernel > 0.0 { p * landing * by_degree / (link_ends * by_kernel) } else { 0.0 };
            for ((class, moments), slopes) in classes.iter().zip(y.chunks_exact(2)).zip(dy.chunks_exact_mut(2)) {
                let mean = class.start + moments[0];
                let [phi, steep, bend] = kernel(mean, gamma);
                let gain = uniform + attracted * (phi + 0.5 * bend * moments[1]).max(0.0);
                slopes[0] = days * (gain - loss * mean);
                slopes[1] = days * (2.0 * (attracted * steep - loss) * moments[1] + gain + loss * mean);
            }
        };
        let state: Vec<f64> = classes.iter().flat_map(|class| [class.mean - class.start, class.variance]).collect();
        let solution = IVP::ode_from_fn(slope, 0.0, 1.0, state)
            .t_eval([1.0])
            .method(ExplicitRungeKutta::dop853().rtol(ODE_TOLERANCE).atol(ODE_TOLERANCE))
            .solve()
            .map_err(|_| GrowthError::Integration { from, to })?;
        let Some(end) = solution.y.last().filter(|end| end.iter().all(|x| x.is_finite())) else {
            return Err(GrowthError::Integration { from, to });
        };
        let moved = self.present.iter_mut().chain(&mut self.cohorts[..arrived]);
        for (class, moments) in moved.zip(end.chunks_exact(2)) {
            (class.mean, class.variance) = (class.start + moments[0], moments[1].max(0.0));
        }
        Ok(())
    }

    /// Mean and variance of the degree of nodes that started at `degree`; none when no node did.
    pub fn moments(&self, degree: u64) -> Option<(f64, f64)> {
        let index = self.present.binary_search_by(|class| class.start.total_cmp(&(degree as f64))).ok()?;
        self.present.get(index).map(|class| (class.mean, class.variance))
    }

    /// Probability that a present node of degree `degree` ends at `threshold` or above, given that it stays.
    pub(super) fn tail(&self, degree: u64, threshold: u64) -> f64 {
        let index = self.present.binary_search_by(|class| class.start.total_cmp(&(degree as f64)));
        index.ok().and_then(|index| self.present.get(index)).map_or(0.0, |class| self.class_tail(class, threshold))
    }

    /// Expected newcomers at `threshold` or above.
    pub(super) fn newcomers(&self, threshold: u64) -> f64 {
        self.cohorts.iter().map(|class| class.nodes * self.class_tail(class, threshold)).sum()
    }

    fn class_tail(&self, class: &Class, threshold: u64) -> f64 {
        // Without losses a degree never falls below its start, and only the gain has a law.
        let floor = if self.losses { 0.0 } else { class.start.floor() };
        let wanted = threshold as f64 - floor;
        if wanted <= 0.0 {
            return 1.0;
        }
        let law = TwoMoments { mean: class.mean - floor, variance: class.variance };
        if law.mean <= 0.0 || law.variance <= 0.0 {
            return if class.mean >= threshold as f64 { 1.0 } else { 0.0 };
        }
        law.above(wanted - 1.0)
    }
}

/// Entry degrees with their shares, many of them gathered into cells at their mean.
fn entry_cells(course: &Course) -> Vec<(f64, f64)> {
    let shares = course.parameters().entry.shares();
    if shares.len() <= MOST_ENTRIES {
        return shares.iter().map(|&(degree, share)| (degree as f64, share)).collect();
    }
    let mut cells: Vec<(f64, f64, f64)> = Vec::new(); // first degree, Σ share·degree, Σ share
    for &(degree, share) in shares {
        let degree = degree as f64;
        match cells.last_mut().filter(|cell| degree < cell.0 * CELL_GROWTH) {
            Some(cell) => (cell.1, cell.2) = (cell.1 + share * degree, cell.2 + share),
            None => cells.push((degree, share * degree, share)),
        }
    }
    cells.iter().map(|&(_, sum, share)| (sum / share, share)).collect()
}

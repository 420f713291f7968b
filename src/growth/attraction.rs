//! What attracts preferential ends when nodes differ: the link ends of active nodes, weighed by growth factor.

use differential_equations::prelude::{ExplicitRungeKutta, IVP};
use nalgebra::{DMatrix, SymmetricEigen};

use super::mean_field::{Course, GrowthError};
use crate::numerics::quadrature::PANEL;
use crate::numerics::tolerances::ODE_TOLERANCE;

/// Growth factors that stand for a gamma distribution in a forecast: with 8, moments up to the 15th are exact.
pub(crate) const FACTORS: usize = 8;

/// One growth factor η of the quadrature over their distribution.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct GrowthFactor {
    /// Share of the nodes that it stands for; the shares add up to one.
    pub share: f64,
    /// η; the mean over the shares is one.
    pub factor: f64,
}

/// `count` nodes and weights of the gamma distribution with mean one and the given variance.
///
/// Formula: generalised Gauss–Laguerre quadrature, α = 1/σ² − 1, from the eigenvalues of the Jacobi matrix (Golub & Welsch
/// 1969); the weights come out normalised, so that no Γ(1/σ²) overflows at small variances.
pub(crate) fn growth_factors(variance: f64, count: usize) -> Vec<GrowthFactor> {
    if variance == 0.0 {
        return vec![GrowthFactor { share: 1.0, factor: 1.0 }];
    }
    let alpha = variance.recip() - 1.0;
    let jacobi = DMatrix::from_fn(count, count, |i, j| {
        let (low, high) = (i.min(j) as f64, i.max(j) as f64);
        match i.abs_diff(j) {
            0 => variance * (2.0 * low + 1.0 + alpha),
            1 => variance * (high * (high + alpha)).sqrt(),
            _ => 0.0,
        }
    });
    let eigen = SymmetricEigen::new(jacobi);
    let weight = |column: usize| eigen.eigenvectors[(0, column)].powi(2);
    let factors = eigen.eigenvalues.iter().enumerate();
    let mut factors: Vec<GrowthFactor> =
        factors.map(|(column, &value)| GrowthFactor { share: weight(column), factor: value.max(0.0) }).collect();
    factors.sort_by(|a, b| a.factor.total_cmp(&b.factor));
    factors
}

/// Σ_q η_q·K_q over K along a course, K_q the link ends of active nodes with growth factor η_q.
///
/// Formula: `dK_q/dt = L·η_q·[(1−p)·s_q + p·K_q/Σ η K] + ē·A·s_q − (θ + κA/N)·K_q`, s_q the factor's share of the nodes; at
/// the start K_q = (1−d)·s_q·K.
///
/// # Numerical notes
/// Solved for K_q/(s_q·K) by the 8th order Runge–Kutta method of Dormand and Prince, to 10⁻¹⁰ a panel of the mesh, and kept at
/// the panel's Gauss–Legendre nodes and ends; between them the barycentric interpolant is as exact. Without dormancy and
/// growth variance it is the constant 1 and nothing is solved.
#[derive(Debug, Clone, Default)]
pub(super) struct Attraction {
    panels: Vec<AttractionPanel>,
}

#[derive(Debug, Clone)]
struct AttractionPanel {
    start: f64,
    /// Times and values there, ascending, both ends included.
    points: Vec<(f64, f64)>,
    weights: Vec<f64>,
}

impl Attraction {
    pub fn along(course: &Course) -> Result<Self, GrowthError> {
        let forces = course.parameters();
        if forces.dormant_share() == 0.0 && forces.growth_variance() == 0.0 {
            return Ok(Self::default());
        }
        let factors = course.growth_factors();
        let p = forces.mix.preferential_share();
        let kappa = forces.dormancy_hazard();
        let attraction = |y: &[f64]| -> f64 { factors.iter().zip(y).map(|(f, y)| f.share * f.factor * y).sum() };
        // Time runs from 0 to 1 on each panel: the solver lands on a whole 1 exactly, and on a day only nearly.
        let slope = |start: f64, days: f64, part: f64, y: &Vec<f64>, dy: &mut Vec<f64>| {
            let day = start + days * part;
            let (nodes, link_ends) = course.totals(day);
            let arrivals = forces.arrivals.rate(day);
            let (landing, entering) = (course.landing(day, nodes), forces.entry.mean() * arrivals);
            let total = attraction(y).max(f64::MIN_POSITIVE);
            // Of K_q/(s_q·K): K itself moves by (L + ēA)/K − θ.
            let shrink = kappa * arrivals / nodes + (landing + entering) / link_ends;
            for (i, f) in factors.iter().enumerate() {
                let landed = landing * f.factor * ((1.0 - p) + p * y[i] / total);
                dy[i] = days * ((landed + entering) / link_ends - shrink * y[i]);
            }
        };
        let mut state = vec![1.0 - forces.dormant_share(); factors.len()];
        let mut panels = Vec::new();
        for pair in course.edges(0.0, course.horizon()).windows(2) {
            let (start, end) = (pair[0], pair[1]);
            let days = end - start;
            let parts: Vec<f64> = PANEL.nodes.iter().copied().chain([1.0]).collect();
            let along = |part: f64, y: &Vec<f64>, dy: &mut Vec<f64>| slope(start, days, part, y, dy);
            let solution = IVP::ode_from_fn(along, 0.0, 1.0, state.clone())
                .t_eval(&parts)
                .method(ExplicitRungeKutta::dop853().rtol(ODE_TOLERANCE).atol(ODE_TOLERANCE))
                .solve()
                .map_err(|_| GrowthError::Integration { from: start, to: end })?;
            let mut points = vec![(start, attraction(&state))];
            points.extend(solution.t.iter().zip(&solution.y).map(|(&part, y)| (start + days * part, attraction(y))));
            if points.len() != parts.len() + 1 || points.iter().any(|(_, value)| !(value.is_finite() && *value > 0.0)) {
                return Err(GrowthError::Integration { from: start, to: end });
            }
            state = solution.y.last().cloned().unwrap_or(state);
            let weights = barycentric(&points);
            panels.push(AttractionPanel { start, points, weights });
        }
        Ok(Self { panels })
    }

    /// Its value at `day`.
    pub fn at(&self, day: f64) -> f64 {
        let after = self.panels.partition_point(|panel| panel.start <= day);
        let Some(panel) = self.panels.get(after.saturating_sub(1)) else { return 1.0 };
        let (mut weighted, mut plain) = (0.0, 0.0);
        for (&(time, value), weight) in panel.points.iter().zip(&panel.weights) {
            if time == day {
                return value;
            }
            weighted += weight / (day - time) * value;
            plain += weight / (day - time);
        }
        weighted / plain
    }
}

/// Weights of barycentric interpolation (Berrut & Trefethen 2004), scaled by the panel's length.
fn barycentric(points: &[(f64, f64)]) -> Vec<f64> {
    let length = points.last().map_or(1.0, |last| last.0) - points.first().map_or(0.0, |first| first.0);
    let weight = |i: usize| {
        let others = points.iter().enumerate().filter(|&(j, _)| j != i);
        others.map(|(_, other)| 4.0 * (points[i].0 - other.0) / length).product::<f64>().recip()
    };
    (0..points.len()).map(weight).collect()
}

#[cfg(test)]
mod tests {
    use super::{FACTORS, growth_factors};

    /// Moments of the gamma distribution with mean one: E η² = 1 + σ², E η³ = (1 + σ²)(1 + 2σ²).
    #[test]
    fn factors_have_the_moments_of_the_gamma_law() {
        for variance in [1e-6, 0.01, 0.3, 1.0, 6.0] {
            let factors = growth_factors(variance, FACTORS);
            let moment = |n: i32| -> f64 { factors.iter().map(|f| f.share * f.factor.powi(n)).sum() };
            for (n, exact) in [(0, 1.0), (1, 1.0), (2, 1.0 + variance), (3, (1.0 + variance) * (1.0 + 2.0 * variance))]
            {
                assert!((moment(n) / exact - 1.0).abs() < 1e-10, "variance {variance}, moment {n}: {}", moment(n));
            }
        }
    }
}

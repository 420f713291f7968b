//! When one node first reaches a threshold.

use super::law::NodeLaw;
use super::mean_field::{Course, GrowthError};
use crate::numerics::quadrature::integrate_adaptively;
use crate::numerics::tolerances::{Accuracy, PASSAGE_AGREEMENT, PASSAGE_FIRST_CELLS, PASSAGE_MAX_CELLS};

/// Gauss–Legendre on [0, 1] with three nodes (DLMF table 3.5.1): (node, weight).
const THREE: [(f64, f64); 3] =
    [(0.112_701_665_379_258_3, 5.0 / 18.0), (0.5, 8.0 / 18.0), (0.887_298_334_620_741_7, 5.0 / 18.0)];

/// The first passage of one node through a threshold.
#[derive(Debug, Clone, Copy)]
pub struct Passage;

impl Passage {
    /// Probability that an active node of growth factor `factor` with `degree` links at day 0 has had at least `threshold`
    /// links at some time up to each of `days` (ascending, within the course). A node that departs before it gets there never
    /// does: departure is a killing at hazard δ, so this is the chance of a node that is present at day 0, whatever becomes
    /// of it. For a node that is known to stay use a course without departures.
    ///
    /// Formula: while it stays a node can rise by one link at a time only, so it is at the threshold j at the moment τ of its
    /// first passage, and with F the distribution of τ
    ///
    /// `P(X_t ≥ j | X_0 = k) = ∫₀ᵗ P(X_t ≥ j | X_s = j) dF(s)`,
    ///
    /// an integral equation of the first kind (Volterra) whose two probabilities are tails of [`NodeLaw`], exact for every
    /// schedule. The answer is `∫₀ᵗ e^{−δs} dF(s)`. Where links are never lost the kernel is 1 and F is the tail itself.
    ///
    /// # Numerical notes
    /// With losses: dF is taken as uniform within cells, the kernel at their middles, and by three Gauss nodes in √(t−s) in the
    /// cell next to t, where it falls from 1 like a square root; the method is stable because the kernel is 1 at s = t (Linz
    /// 1985). Cells are halved until the answer changes by less than 10⁻³ (`PASSAGE_AGREEMENT`). Without losses but with
    /// departures: an adaptive integral, 10⁻⁵. Without either: exact as [`NodeLaw`].
    /// Kernels of another exponent than 1 and dormancy are not served: the course's hazards are those of an active node under
    /// the linear kernel.
    ///
    /// # Errors
    /// Those of [`NodeLaw::tail`]; [`GrowthError::Integration`] when the answer does not settle.
    ///
    /// # References
    /// Linz 1985, Analytical and Numerical Methods for Volterra Equations, chapter 10 (from memory).
    ///
    /// ```
    /// use tailcast::growth::{Course, NodeLaw, Passage};
    /// use tailcast::model::*;
    /// let forces = GrowthParameters::new(
    ///     DegreeKind::Received, AttachmentMix::new(0.8).unwrap(), ArrivalPlan::constant(1.0).unwrap(),
    ///     EntryDegrees::single(0), 2.0,
    /// ).unwrap();
    /// let counts = DegreeCounts::from_pairs(&[(0, 60), (5, 40)]).unwrap();
    /// let course = Course::new(&counts, forces, 100.0).unwrap();
    /// // Links last: to have reached 12 is to have 12.
    /// let reached = Passage::of(&course, 1.0, 5, 12, &[50.0, 100.0]).unwrap();
    /// assert!((reached[1] - NodeLaw::between(&course, 0.0, 100.0).tail(5, 12).unwrap()).abs() < 1e-9);
    /// ```
    pub fn of(
        course: &Course,
        factor: f64,
        degree: u64,
        threshold: u64,
        days: &[f64],
    ) -> Result<Vec<f64>, GrowthError> {
        if degree >= threshold {
            return Ok(vec![1.0; days.len()]);
        }
        let node = Node { course, factor, degree, threshold };
        let forces = course.parameters();
        let mut reached = match (forces.end_loss_hazard() > 0.0, forces.departure_hazard() > 0.0) {
            (false, false) => days.iter().map(|&day| node.tail(day, Accuracy::Full)).collect::<Result<_, _>>()?,
            (false, true) => node.before_departing(days)?,
            (true, _) => node.settled(days)?,
        };
        // What was reached stays reached, whatever rounding and cells say.
        let mut so_far: f64 = 0.0;
        for value in &mut reached {
            so_far = so_far.max(value.clamp(0.0, 1.0));
            *value = so_far;
        }
        Ok(reached)
    }
}

struct Node<'a> {
    course: &'a Course,
    factor: f64,
    degree: u64,
    threshold: u64,
}

impl Node<'_> {
    fn tail(&self, day: f64, accuracy: Accuracy) -> Result<f64, GrowthError> {
        if day <= 0.0 {
            return Ok(0.0);
        }
        NodeLaw::of_group(self.course, self.factor, 0.0, day, day).tail_within(self.degree, self.threshold, accuracy)
    }

    /// P(X_t ≥ j | X_s = j).
    fn still_there(&self, from: f64, to: f64) -> Result<f64, GrowthError> {
        NodeLaw::of_group(self.course, self.factor, from, to, to).tail_within(
            self.threshold,
            self.threshold,
            Accuracy::Working,
        )
    }

    /// ∫e^{−δs} dF(s) = e^{−δt}·F(t) + δ·∫e^{−δs}·F(s) ds, where F is the tail.
    fn before_departing(&self, days: &[f64]) -> Result<Vec<f64>, GrowthError> {
        let hazard = self.course.parameters().departure_hazard();
        let (mut gone, mut from) = (0.0, 0.0);
        let mut reached = Vec::with_capacity(days.len());
        for &day in days {
            let kept = self.course.survival(day) * self.tail(day, Accuracy::Full)?;
            if day > from {
                let mut lost = |s: f64| -> Result<f64, GrowthError> {
                    Ok(hazard * self.course.survival(s) * self.tail(s, Accuracy::Working)?)
                };
                for pair in self.course.edges(from, day).windows(2) {
                    gone += integrate_adaptively(pair[0], pair[1], kept + gone, Accuracy::Working, &mut lost)?;
                }
                from = day;
            }
            reached.push(kept + gone);
        }
        Ok(reached)
    }

    /// The integral equation on finer and finer cells.
    fn settled(&self, days: &[f64]) -> Result<Vec<f64>, GrowthError> {
        let Some(&last) = days.last() else { return Ok(Vec::new()) };
        let mut cells = PASSAGE_FIRST_CELLS;
        let mut coarse = self.solved(days, last, cells)?;
        while cells < PASSAGE_MAX_CELLS {
            cells *= 2;
            let fine = self.solved(days, last, cells)?;
            let change = coarse.iter().zip(&fine).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max);
            if change <= PASSAGE_AGREEMENT {
                return Ok(fine);
            }
            coarse = fine;
        }
        Err(GrowthError::Integration { from: 0.0, to: last })
    }

    /// With about `cells` cells up to `last`; every one of `days` is an edge.
    fn solved(&self, days: &[f64], last: f64, cells: usize) -> Result<Vec<f64>, GrowthError> {
        let mut edges = vec![0.0];
        for &day in days {
            let from = edges.last().copied().unwrap_or(0.0);
            let pieces = (cells as f64 * (day - from) / last).ceil().max(0.0) as usize;
            edges.extend((1..=pieces).map(|i| from + (day - from) * i as f64 / pieces as f64));
        }
        let mut passed: Vec<(f64, f64)> = Vec::with_capacity(edges.len()); // (middle of the cell, ΔF)
        let mut reached = vec![0.0];
        let mut sum = 0.0;
        for pair in edges.windows(2) {
            let (from, to) = (pair[0], pair[1]);
            let mut explained = 0.0;
            for &(middle, share) in &passed {
                if share > PASSAGE_AGREEMENT / (100.0 * cells as f64) {
                    explained += share * self.still_there(middle, to)?;
                }
            }
            // ∫₀¹K(to − Δx²)·2x dx, the mean of K over the cell.
            let mut own = 0.0;
            for (x, weight) in THREE {
                own += weight * 2.0 * x * self.still_there(to - (to - from) * x * x, to)?;
            }
            let share = ((self.tail(to, Accuracy::Working)? - explained) / own).max(0.0);
            let middle = 0.5 * (from + to);
            passed.push((middle, share));
            sum += share * self.course.survival(middle);
            reached.push(sum);
        }
        let at = |day: &f64| reached[edges.partition_point(|edge| edge <= day).saturating_sub(1)];
        Ok(days.iter().map(at).collect())
    }
}

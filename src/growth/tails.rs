//! Tail sizes: how many nodes will have at least a threshold of links.

use super::law::MixedLaw;
use super::mean_field::{Course, GrowthError};
use super::moments::MomentLaw;
use crate::model::DegreeCounts;
use crate::numerics::quadrature::{PANEL, integrate_adaptively};
use crate::numerics::tolerances::{Accuracy, TAIL_ZERO};

/// The tail size S_j at a date, as far as the growth law determines it: a Poisson-binomial count over the present nodes
/// plus a Poisson count over newcomers.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct TailSum {
    /// Nodes in the tail at the start that are expected to be in it still: all of them without losses.
    pub kept: f64,
    /// Expected tail size.
    pub mean: f64,
    /// Its sampling variance, given the parameters.
    pub variance: f64,
    /// ln of the probability that no node at all is in the tail.
    pub log_none: f64,
}

/// The law of a whole network at one day: of every present node's degree and of the newcomers'.
///
/// Formula: `S_j = Σ_k n_k·D·P(k → ≥ j) + ∫₀ᵗ A(s)·D(s,t)·Σ_k e_k·P_{s→t}(k → ≥ j) ds`
///
/// # Numerical notes
/// Cost follows the distinct degrees that can matter: a node with more links is the likelier to reach the threshold
/// (stochastic order of the linear birth–death process), so the sum runs down from the threshold and stops once all nodes
/// below could add less than a negligible share of it (10⁻¹³ at full accuracy). The newcomers' integral is adaptive to 10⁻⁹ of
/// the whole. Dormancy takes 11 times as long, growth variance 8 times. A power kernel has no exact law; its node laws are
/// fitted to their first two moments ([`MomentLaw`]).
///
/// ```
/// use tailcast::growth::{Course, NetworkLaw};
/// use tailcast::model::*;
/// use tailcast::numerics::tolerances::Accuracy;
/// let forces = GrowthParameters::new(
///     DegreeKind::Received, AttachmentMix::UNIFORM, ArrivalPlan::constant(1.0).unwrap(), EntryDegrees::single(0), 2.0,
/// ).unwrap();
/// let counts = DegreeCounts::from_pairs(&[(0, 90), (9, 10)]).unwrap();
/// let course = Course::new(&counts, forces, 100.0).unwrap();
/// let tail = NetworkLaw::at(&course, &counts, 100.0).unwrap().tail(9, Accuracy::Full).unwrap();
/// assert!(tail.kept == 10.0 && tail.mean > 10.0 && tail.mean < 11.0);
/// ```
pub struct NetworkLaw<'a> {
    course: &'a Course,
    counts: &'a DegreeCounts,
    day: f64,
    nodes: NodeLaws,
}

/// The laws of the network's nodes.
enum NodeLaws {
    /// Exact, of a present node and of one that arrives at day 0.
    Exact { present: MixedLaw, earliest: MixedLaw },
    /// By two moments.
    Moments(MomentLaw),
}

impl<'a> NetworkLaw<'a> {
    /// The law at `day` of the network with `counts` at day 0 of `course`.
    ///
    /// # Errors
    /// When the moments of a power kernel cannot be integrated.
    pub fn at(course: &'a Course, counts: &'a DegreeCounts, day: f64) -> Result<Self, GrowthError> {
        let nodes = if course.parameters().kernel_exponent() == 1.0 {
            let present = MixedLaw::of_present(course, day);
            NodeLaws::Exact { present, earliest: MixedLaw::of_newcomer(course, 0.0, day) }
        } else {
            NodeLaws::Moments(MomentLaw::solve(course, counts, day)?)
        };
        Ok(Self { course, counts, day, nodes })
    }

    /// The tail size S_j.
    ///
    /// # Errors
    /// Those of [`super::NodeLaw::tail`].
    pub fn tail(&self, threshold: u64, accuracy: Accuracy) -> Result<TailSum, GrowthError> {
        let mut sum = TailSum::default();
        let newcomers = match &self.nodes {
            NodeLaws::Exact { present, earliest } => {
                self.add_present(&mut sum, threshold, accuracy, |k| present.tail(&[(k, 1.0)], threshold, accuracy))?;
                self.newcomers(earliest, threshold, accuracy, sum.mean)?
            }
            NodeLaws::Moments(laws) => {
                self.add_present(&mut sum, threshold, accuracy, |k| Ok(laws.tail(k, threshold)))?;
                laws.newcomers(threshold)
            }
        };
        sum.mean += newcomers;
        sum.variance += newcomers;
        sum.log_none -= newcomers;
        Ok(sum)
    }

    /// Whether [`Self::rough_tail`] is cheaper than [`Self::tail`].
    pub fn has_rough_tail(&self) -> bool {
        matches!(&self.nodes, NodeLaws::Exact { present, .. } if present.is_mixed())
    }

    /// The tail size to a few per cent, for what only measures an uncertainty or starts a search: under dormancy or growth
    /// variance by two moments of each node's law, else [`Self::tail`] at working accuracy.
    ///
    /// # Errors
    /// Those of [`super::NodeLaw::tail`].
    pub fn rough_tail(&self, threshold: u64) -> Result<TailSum, GrowthError> {
        let present = match &self.nodes {
            NodeLaws::Exact { present, .. } if present.is_mixed() => present,
            _ => return self.tail(threshold, Accuracy::Working),
        };
        let mut sum = TailSum::default();
        self.add_present(&mut sum, threshold, Accuracy::Working, |k| Ok(present.rough_tail(&[(k, 1.0)], threshold)))?;
        let (course, day) = (self.course, self.day);
        let parameters = course.parameters();
        let in_tail = |arrival: f64| {
            let law = MixedLaw::of_newcomer(course, arrival, day);
            let share = law.rough_tail(parameters.entry.shares(), threshold);
            parameters.arrivals.rate(arrival) * course.survival(day - arrival) * share
        };
        let edges = course.arrival_edges(day);
        let newcomers: f64 = edges.windows(2).map(|pair| PANEL.integrate(pair[0], pair[1], in_tail)).sum();
        sum.mean += newcomers;
        sum.variance += newcomers;
        sum.log_none -= newcomers;
        Ok(sum)
    }

    fn add_present(
        &self,
        sum: &mut TailSum,
        threshold: u64,
        accuracy: Accuracy,
        tail: impl Fn(u64) -> Result<f64, GrowthError>,
    ) -> Result<(), GrowthError> {
        let survival = self.course.survival(self.day);
        let mut below = self.counts.nodes();
        for (degree, nodes) in self.counts.iter().rev() {
            let probability = survival * tail(degree)?;
            if probability * below as f64 <= accuracy.negligible() * sum.mean + TAIL_ZERO {
                break;
            }
            below -= nodes;
            let nodes = nodes as f64;
            sum.mean += nodes * probability;
            sum.variance += nodes * probability * (1.0 - probability);
            sum.log_none += nodes * (-probability).ln_1p();
            if degree >= threshold {
                sum.kept += nodes * probability;
            }
        }
        Ok(())
    }

    fn newcomers(
        &self,
        earliest: &MixedLaw,
        threshold: u64,
        accuracy: Accuracy,
        present: f64,
    ) -> Result<f64, GrowthError> {
        let (course, day) = (self.course, self.day);
        let parameters = course.parameters();
        let arrivals = parameters.arrivals.arrivals_between(0.0, day);
        let entry = parameters.entry.shares();
        // The earliest newcomers bound the later ones, as long as links are not lost.
        let bound = arrivals * earliest.tail(entry, threshold, accuracy)?;
        if arrivals == 0.0 || (!parameters.has_losses() && bound <= accuracy.negligible() * present + TAIL_ZERO) {
            return Ok(0.0);
        }
        let mut in_tail = |arrival: f64| -> Result<f64, GrowthError> {
            let share = MixedLaw::of_newcomer(course, arrival, day).tail(entry, threshold, accuracy)?;
            Ok(parameters.arrivals.rate(arrival) * course.survival(day - arrival) * share)
        };
        let mut mean = 0.0;
        for pair in course.arrival_edges(day).windows(2) {
            mean += integrate_adaptively(pair[0], pair[1], present + mean, accuracy, &mut in_tail)?;
        }
        Ok(mean)
    }
}

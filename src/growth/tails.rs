//! Tail sizes: how many nodes will have at least a threshold of links.

use std::cell::RefCell;
use std::collections::HashMap;
use std::rc::Rc;

use super::capped::{capped_parts, needs_states};
use super::holdings::{Holdings, Piece, holdings};
use super::law::{MixedLaw, NodeLaw, SteadyLaw};
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
    /// Its third cumulant, given the parameters.
    pub third_cumulant: f64,
    /// ln of the probability that no node at all is in the tail.
    pub log_none: f64,
}

/// The present nodes of one degree, as far as they can matter to a tail.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TailClass {
    /// Degree at the start.
    pub degree: u64,
    /// Nodes of that degree at the start.
    pub nodes: f64,
    /// Probability that one of them is present and in the tail.
    pub probability: f64,
}

/// Whom a tail is made of.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct TailParts {
    /// Present nodes, from the largest degree down; those that cannot matter are left out.
    pub present: Vec<TailClass>,
    /// Expected newcomers.
    pub newcomers: f64,
}

impl TailParts {
    /// The tail size, and how many of those with `threshold` links or more at the start are in it still.
    pub fn sum(&self, threshold: u64) -> TailSum {
        let mut sum = TailSum::default();
        self.present.iter().for_each(|&class| sum.add(class, threshold));
        sum.with_newcomers(self.newcomers)
    }

    fn present_mean(&self) -> f64 {
        self.present.iter().map(|class| class.nodes * class.probability).sum()
    }
}

impl TailSum {
    fn add(&mut self, TailClass { degree, nodes, probability }: TailClass, threshold: u64) {
        let (mean, missing) = (nodes * probability, 1.0 - probability);
        self.mean += mean;
        self.variance += mean * missing;
        self.third_cumulant += mean * missing * (1.0 - 2.0 * probability);
        self.log_none += nodes * ln_complement(probability);
        if degree >= threshold {
            self.kept += mean;
        }
    }

    /// With so many newcomers expected, whose number is Poisson.
    fn with_newcomers(self, expected: f64) -> Self {
        Self {
            mean: self.mean + expected,
            variance: self.variance + expected,
            third_cumulant: self.third_cumulant + expected,
            log_none: self.log_none - expected,
            ..self
        }
    }
}

/// ln(1 − p): most classes of a tail are far from it, and there four terms of the series are exact.
fn ln_complement(p: f64) -> f64 {
    const SMALL: f64 = 1e-4;
    if p < SMALL { -p * (1.0 + p * (1.0 / 2.0 + p * (1.0 / 3.0 + p / 4.0))) } else { (-p).ln_1p() }
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
    /// What newcomers of a day are like, by the bits of that day: every threshold asks for the same days.
    cohorts: RefCell<HashMap<u64, Rc<Cohort>>>,
    cancelled: &'a dyn Fn() -> bool,
}

/// Newcomers of one day.
struct Cohort {
    /// How many a day are expected to be present still.
    present: f64,
    law: MixedLaw,
}

/// The laws of the network's nodes.
enum NodeLaws {
    /// Exact, of a present node and of one that arrives at day 0.
    Exact { present: Box<MixedLaw>, earliest: MixedLaw },
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
            let present = Box::new(MixedLaw::of_present(course, day));
            NodeLaws::Exact { present, earliest: MixedLaw::of_newcomer(course, 0.0, day) }
        } else {
            NodeLaws::Moments(MomentLaw::solve(course, counts, day)?)
        };
        Ok(Self { course, counts, day, nodes, cohorts: RefCell::default(), cancelled: &|| false })
    }

    /// The same law, whose tails ask `cancelled` before each node law they are made of: one takes microseconds to a few milliseconds,
    /// while a whole tail of an extreme network may take minutes.
    #[must_use]
    pub fn until(self, cancelled: &'a dyn Fn() -> bool) -> Self {
        Self { cancelled, ..self }
    }

    /// The tail size S_j.
    ///
    /// # Errors
    /// Those of [`super::NodeLaw::tail`]; cancellation.
    pub fn tail(&self, threshold: u64, accuracy: Accuracy) -> Result<TailSum, GrowthError> {
        let Some(steady) = self.steady() else {
            return Ok(self.parts(threshold, accuracy)?.sum(threshold));
        };
        let mut sum = TailSum::default();
        let kept = self.counts.tail_size(threshold);
        if kept > 0 {
            // Links last: whoever is in the tail and stays is in it still, whatever its degree.
            let probability = self.course.survival(self.day);
            sum.add(TailClass { degree: threshold, nodes: kept as f64, probability }, threshold);
        }
        self.risers(steady, threshold, accuracy, |class| sum.add(class, threshold))?;
        let newcomers = self.steady_newcomers(steady, threshold, accuracy, sum.mean)?;
        Ok(sum.with_newcomers(newcomers))
    }

    /// Whom the tail is made of.
    ///
    /// # Errors
    /// Those of [`super::NodeLaw::tail`]; cancellation.
    pub fn parts(&self, threshold: u64, accuracy: Accuracy) -> Result<TailParts, GrowthError> {
        if let Some(cap) = self.course.cap().filter(|_| needs_states(self.course, threshold)) {
            return capped_parts(self.course, self.counts, self.day, threshold, cap);
        }
        let mut parts = TailParts::default();
        if let Some(steady) = self.steady() {
            self.risers(steady, threshold, accuracy, |class| parts.present.push(class))?;
            let probability = self.course.survival(self.day);
            let kept = self.counts.iter().skip_while(|&(degree, _)| degree < threshold);
            parts.present.extend(kept.map(|(degree, nodes)| TailClass { degree, nodes: nodes as f64, probability }));
            parts.present.reverse();
            parts.newcomers = self.steady_newcomers(steady, threshold, accuracy, parts.present_mean())?;
            return Ok(parts);
        }
        match &self.nodes {
            NodeLaws::Exact { present, earliest } => {
                let mut tails = present.class_tails(threshold, accuracy);
                self.add_present(&mut parts, threshold, accuracy, |k| tails.of(k))?;
                parts.newcomers = self.newcomers(earliest, threshold, accuracy, parts.present_mean())?;
            }
            NodeLaws::Moments(laws) => {
                self.add_present(&mut parts, threshold, accuracy, |k| Ok(laws.tail(k, threshold)))?;
                parts.newcomers = laws.newcomers(threshold);
            }
        }
        Ok(parts)
    }

    /// Expected degree of today's largest node, given that it stays; 0 under a kernel whose nodes have no exact law.
    pub(crate) fn mean_of_largest(&self) -> f64 {
        match &self.nodes {
            NodeLaws::Exact { present, .. } => present.moments(self.counts.largest()).0,
            NodeLaws::Moments(_) => 0.0,
        }
    }

    /// Whether [`Self::rough_tail`] is cheaper than [`Self::tail`].
    pub fn has_rough_tail(&self) -> bool {
        matches!(&self.nodes, NodeLaws::Exact { present, .. } if present.is_mixed())
    }

    /// The tail size to a few per cent, for what only measures an uncertainty or starts a search: under dormancy or growth
    /// variance by two moments of each node's law, else [`Self::tail`] at working accuracy.
    ///
    /// # Errors
    /// Those of [`super::NodeLaw::tail`]; cancellation.
    pub fn rough_tail(&self, threshold: u64) -> Result<TailSum, GrowthError> {
        let present = match &self.nodes {
            NodeLaws::Exact { present, .. } if present.is_mixed() => present,
            _ => return self.tail(threshold, Accuracy::Working),
        };
        let mut parts = TailParts::default();
        let tail = |k| Ok(present.rough_tail(&[(k, 1.0)], threshold));
        self.add_present(&mut parts, threshold, Accuracy::Working, tail)?;
        let (course, day) = (self.course, self.day);
        let parameters = course.parameters();
        let in_tail = |arrival: f64| {
            let law = MixedLaw::of_newcomer(course, arrival, day);
            let share = law.rough_tail(parameters.entry.shares(), threshold);
            parameters.arrivals.rate(arrival) * course.survival(day - arrival) * share
        };
        let edges = course.arrival_edges(day);
        self.check()?;
        parts.newcomers = edges.windows(2).map(|pair| PANEL.integrate(pair[0], pair[1], in_tail)).sum();
        Ok(parts.sum(threshold))
    }

    /// What the nodes within each of `pieces` of the degrees hold and weigh.
    ///
    /// # Errors
    /// Under a kernel whose nodes have no exact law.
    pub fn holdings(&self, pieces: &[Piece]) -> Result<Holdings, GrowthError> {
        let NodeLaws::Exact { present, .. } = &self.nodes else { return Err(GrowthError::NoNodeLaw) };
        Ok(holdings(self.course, self.counts, self.day, present, pieces))
    }

    fn check(&self) -> Result<(), GrowthError> {
        if (self.cancelled)() { Err(GrowthError::Cancelled) } else { Ok(()) }
    }

    /// The closed form of a present node's law, where it has one.
    fn steady(&self) -> Option<SteadyLaw> {
        match &self.nodes {
            NodeLaws::Exact { present, .. } if self.course.cap().is_none() => present.steady(),
            _ => None,
        }
    }

    /// The present nodes below the threshold that may come past it, from the smallest degree up; those that by a bound cannot matter
    /// are left out.
    fn risers(
        &self,
        law: SteadyLaw,
        threshold: u64,
        accuracy: Accuracy,
        mut each: impl FnMut(TailClass),
    ) -> Result<(), GrowthError> {
        self.check()?;
        let counts = self.counts;
        let below = &counts.degrees()[..counts.degrees().partition_point(|&degree| degree < threshold)];
        let (Some(&highest), nodes) = (below.last(), counts.nodes_by_degree()) else { return Ok(()) };
        let survival = self.course.survival(self.day);
        // Where nobody is in the tail yet, the likeliest tell the scale.
        let kept = counts.tail_size(threshold);
        let likeliest = (kept == 0).then(|| law.tail(highest, threshold));
        let least = likeliest.map_or(kept as f64, |tail| nodes[below.len() - 1] as f64 * tail);
        let negligible = accuracy.negligible() * least + TAIL_ZERO / survival;
        let up_to = |degree: u64| (counts.nodes() - counts.tail_size(degree + 1)) as f64;
        let mut first = below.partition_point(|&degree| law.most(degree, threshold) * up_to(degree) <= negligible);
        // A bound for all below is a loose one: of the rest, those go that by themselves are no more than an even share.
        let even_share = negligible / below.len() as f64;
        while first < below.len() && nodes[first] as f64 * law.most(below[first], threshold) <= even_share {
            first += 1;
        }
        let mut rise = |place: usize, probability: f64| {
            each(TailClass { degree: below[place], nodes: nodes[place] as f64, probability: survival * probability });
        };
        let rest = below.len() - usize::from(likeliest.is_some());
        let first = first.min(rest);
        law.tails(&below[first..rest], threshold, |place, probability| rise(first + place, probability));
        if let Some(probability) = likeliest {
            rise(rest, probability);
        }
        Ok(())
    }

    fn add_present(
        &self,
        parts: &mut TailParts,
        threshold: u64,
        accuracy: Accuracy,
        mut tail: impl FnMut(u64) -> Result<f64, GrowthError>,
    ) -> Result<(), GrowthError> {
        let survival = self.course.survival(self.day);
        let cap = self.course.cap();
        let gainless = cap.map(|_| NodeLaw::gainless(self.course, 0.0, self.day));
        let mut below = self.counts.nodes();
        let mut mean = 0.0;
        for (degree, nodes) in self.counts.iter().rev() {
            self.check()?;
            let probability = match (cap, &gainless) {
                (Some(cap), Some(law)) if degree >= cap => law.tail_within(degree, threshold, accuracy)?,
                (Some(cap), _) if threshold > cap => 0.0,
                _ => tail(degree)?,
            };
            // An inversion may round to a hair above one.
            let probability = (survival * probability).min(1.0);
            // A node at the cap gains nothing, and may reach less than one just below it.
            let ordered = cap.is_none_or(|cap| degree < cap);
            if ordered && probability * below as f64 <= accuracy.negligible() * mean + TAIL_ZERO {
                break;
            }
            below -= nodes;
            let nodes = nodes as f64;
            mean += nodes * probability;
            parts.present.push(TailClass { degree, nodes, probability });
        }
        Ok(())
    }

    fn cohort(&self, arrival: f64) -> Rc<Cohort> {
        let make = || {
            let present = self.course.parameters().arrivals.rate(arrival) * self.course.survival(self.day - arrival);
            Rc::new(Cohort { present, law: MixedLaw::of_newcomer(self.course, arrival, self.day) })
        };
        self.cohorts.borrow_mut().entry(arrival.to_bits()).or_insert_with(make).clone()
    }

    /// [`Self::newcomers`] where their laws have the closed form of the present nodes' law, for what lands after their arrival.
    fn steady_newcomers(
        &self,
        present: SteadyLaw,
        threshold: u64,
        accuracy: Accuracy,
        others: f64,
    ) -> Result<f64, GrowthError> {
        let (course, day) = (self.course, self.day);
        let parameters = course.parameters();
        let arrivals = parameters.arrivals.arrivals_between(0.0, day);
        let entry = parameters.entry.shares();
        let in_tail =
            |law: SteadyLaw| -> f64 { entry.iter().map(|&(degree, share)| share * law.tail(degree, threshold)).sum() };
        // The earliest newcomers bound the later ones, and have the law of the present.
        let negligible = |share: f64| arrivals * share <= accuracy.negligible() * others + TAIL_ZERO;
        let most = |&(degree, share): &(u64, f64)| share * present.most(degree, threshold);
        if arrivals == 0.0 || negligible(entry.iter().map(most).sum()) || negligible(in_tail(present)) {
            return Ok(0.0);
        }
        let NodeLaws::Exact { earliest, .. } = &self.nodes else { return Err(GrowthError::NoNodeLaw) };
        let Some(whole) = course.exposure(0.0, day) else {
            return self.newcomers(earliest, threshold, accuracy, others);
        };
        let mut of_day = |arrival: f64| -> Result<f64, GrowthError> {
            self.check()?;
            let rate = parameters.arrivals.rate(arrival) * course.survival(day - arrival);
            let share = course.exposure(arrival, day).filter(|_| whole > 0.0).map_or(0.0, |exposure| exposure / whole);
            Ok(rate * in_tail(present.of_last(share)))
        };
        let mut mean = 0.0;
        for pair in course.arrival_edges(day).windows(2) {
            mean += integrate_adaptively(pair[0], pair[1], others + mean, accuracy, &mut of_day)?;
        }
        Ok(mean)
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
        // Of those that arrive at or past a cap, links are only lost; the others do not come past it.
        let (open, full) = entry.split_at(course.cap().map_or(entry.len(), |cap| entry.partition_point(|e| e.0 < cap)));
        let open = if course.cap().is_some_and(|cap| threshold > cap) { &[] } else { open };
        // The earliest newcomers bound the later ones, as long as links are not lost.
        let lossless = !parameters.has_losses() && full.is_empty();
        let bound = arrivals * if lossless { earliest.tail(open, threshold, accuracy)? } else { 1.0 };
        if arrivals == 0.0 || (lossless && bound <= accuracy.negligible() * present + TAIL_ZERO) {
            return Ok(0.0);
        }
        let mut in_tail = |arrival: f64| -> Result<f64, GrowthError> {
            self.check()?;
            let cohort = self.cohort(arrival);
            let mut share = cohort.law.tail(open, threshold, accuracy)?;
            if !full.is_empty() {
                share += NodeLaw::gainless(course, arrival, day).mixture_tail(full, threshold, accuracy)?;
            }
            Ok(cohort.present * share)
        };
        let mut mean = 0.0;
        for pair in course.arrival_edges(day).windows(2) {
            mean += integrate_adaptively(pair[0], pair[1], present + mean, accuracy, &mut in_tail)?;
        }
        Ok(mean)
    }
}

//! Watched nodes: where named nodes and classes of nodes are going.

use super::OriginError;
use super::hubs::{log_gain, log_spread};
use super::prospect::{Prospect, of_growth};
use super::questions::{
    AmountForecast, ClassAnswer, ClassAtDate, ClassPassing, DateAt, DegreeAtDate, NodeAnswer, PassedAtDate, Passing,
    WatchAnswer,
};
use crate::forecast::{CountLaw, first_whole};
use crate::growth::{Course, GrowthError, MixedLaw, Passage};
use crate::model::{Change, Interval, MAX_DEGREE, Watch, WatchedClass, WatchedNode};
use crate::numerics::elementary::{normal_cdf, normal_quantile};
use crate::numerics::tolerances::Accuracy;

/// Days that the way to the last date is looked at for the dates of passing, besides those asked for.
const STEPS: u32 = 24;
/// Probabilities are told apart down to this many standard deviations.
const FARTHEST_DEVIATION: f64 = 8.0;
/// A larger relative error of a node's hazard says no more.
const MOST_ERROR: f64 = 3.0;
/// With more dates than this first passages are worked out at even steps and read off between them.
const MOST_DAYS: usize = 64;
/// Probabilities whose dates are told.
const TOLD: [f64; 3] = [0.05, 0.5, 0.95];

/// Follows what `watch` names, by the fitted forces.
///
/// Formula: the law of each node's degree, and its first passage past each threshold. Probabilities are means over what is uncertain
/// ([`blurred`]): the ends of each direction of the forces, and a node's own hazard e^{±model error} times the fitted one.
///
/// # Errors
/// Cancellation; growth that cannot be computed.
pub(super) fn watched(prospect: &Prospect, watch: &Watch) -> Result<WatchAnswer, OriginError> {
    let standing = Change::none("");
    let horizon = prospect.request.plan.days().last().copied().unwrap_or(0.0);
    let (central, ends) = (prospect.course(&standing, horizon)?, prospect.ends(&standing, horizon)?);
    if central.parameters().kernel_exponent() != 1.0 {
        return Err(of_growth(GrowthError::NoNodeLaw));
    }
    let scene = Scene::new(prospect, watch, &central, &ends)?;
    let nodes = watch.nodes.iter().map(|node| scene.node(node)).collect::<Result<Vec<_>, _>>()?;
    let classes = watch.classes.iter().map(|class| scene.class(class)).collect::<Result<_, _>>()?;
    // Of nodes already past all thresholds nothing is asked; the others by their chance at the highest one.
    let chance = |node: &NodeAnswer| node.passing.last().and_then(|p| p.dates.last()).map(|at| at.passed);
    let mut order: Vec<(f64, &NodeAnswer)> = nodes.iter().filter_map(|node| Some((chance(node)?, node))).collect();
    order.sort_by(|a, b| b.0.total_cmp(&a.0));
    let likeliest = order.into_iter().map(|(_, node)| node.node.name.clone()).collect();
    Ok(WatchAnswer { nodes, classes, likeliest })
}

/// One way in which things may go, with the law of a present node at each day.
struct Way<'a> {
    course: &'a Course,
    /// Of a node's hazard over that of its kind.
    factor: f64,
    laws: Vec<MixedLaw>,
}

/// The ways in which things may go: by the fitted forces, and to either side in each direction that is uncertain.
struct Scene<'a> {
    prospect: &'a Prospect<'a>,
    central: Way<'a>,
    sides: Vec<(Way<'a>, Way<'a>)>,
    ends: &'a [(Course, Course)],
    thresholds: Vec<u64>,
    /// Days looked at, ascending, and the places of the forecast's dates among them.
    days: Vec<f64>,
    asked: Vec<usize>,
}

/// Probabilities of one node at each day: of being past a threshold, and of having been; and by how much each is uncertain.
struct Chances {
    at_least: Vec<f64>,
    passed: Vec<f64>,
    doubt: Vec<f64>,
}

impl<'a> Scene<'a> {
    fn new(
        prospect: &'a Prospect<'a>,
        watch: &Watch,
        central: &'a Course,
        ends: &'a [(Course, Course)],
    ) -> Result<Self, OriginError> {
        let plan = &prospect.request.plan;
        let horizon = plan.days().last().copied().unwrap_or(0.0);
        let mut days: Vec<f64> = (1..=STEPS).map(|i| horizon * f64::from(i) / f64::from(STEPS)).collect();
        days.extend(plan.days());
        days.sort_by(f64::total_cmp);
        days.dedup();
        let asked = plan.days().iter().filter_map(|day| days.iter().position(|d| d == day)).collect();
        let thresholds = watch.thresholds.as_ref().map_or(plan.thresholds(), |own| own.values()).to_vec();
        let way = |course: &'a Course, factor: f64| Way {
            course,
            factor,
            laws: days.iter().map(|&day| MixedLaw::of_present_growing(course, factor, day)).collect(),
        };
        let factor = prospect.node_error(horizon).min(MOST_ERROR).exp();
        let mut sides = vec![(way(central, factor.recip()), way(central, factor))];
        sides.extend(ends.iter().map(|(low, high)| (way(low, 1.0), way(high, 1.0))));
        Ok(Self { prospect, central: way(central, 1.0), sides, ends, thresholds, days, asked })
    }

    fn check(&self) -> Result<(), OriginError> {
        self.prospect.check()
    }

    fn node(&self, node: &WatchedNode) -> Result<NodeAnswer, OriginError> {
        let plan = &self.prospect.request.plan;
        let mut dates = Vec::new();
        for (&date, &day) in plan.dates().iter().zip(plan.days()) {
            self.check()?;
            dates.push(self.degree(node.degree, date, day)?);
        }
        let open = self.thresholds.iter().filter(|&&threshold| threshold > node.degree);
        let passing = open.map(|&threshold| {
            self.check()?;
            let chances = self.chances(node.degree, threshold)?;
            let at = |(&i, &date): (&usize, &jiff::Timestamp)| PassedAtDate {
                date,
                at_least: chances.at_least[i],
                passed: chances.passed[i],
            };
            let crossing = TOLD.map(|probability| {
                let date = date_at(&self.days, &chances.passed, probability).and_then(|day| self.prospect.date(day));
                DateAt { probability, date }
            });
            let dates = self.asked.iter().zip(plan.dates()).map(at).collect();
            Ok(Passing { threshold, dates, crossing: crossing.to_vec() })
        });
        let passing = passing.collect::<Result<_, OriginError>>()?;
        Ok(NodeAnswer { node: node.clone(), dates, passing })
    }

    /// The degree of a node at a date, if it is still there.
    fn degree(&self, start: u64, date: jiff::Timestamp, day: f64) -> Result<DegreeAtDate, OriginError> {
        let course = self.central.course;
        let law = MixedLaw::of_present(course, day);
        let (expected, variance) = law.moments(start);
        let floor = if course.parameters().has_losses() { 0.0 } else { start as f64 };
        let reach = (expected + 40.0 * variance.sqrt() + 40.0).min(MAX_DEGREE as f64);
        let quantile = |probability: f64| -> Result<f64, OriginError> {
            let mut failure = None;
            let found =
                first_whole(floor, reach, |x| match law.tail(&[(start, 1.0)], x as u64 + 1, Accuracy::Working) {
                    Ok(above) => (1.0 - above) - probability,
                    Err(error) => {
                        failure.get_or_insert(error);
                        0.0
                    }
                });
            failure.map_or(Ok(found), |error: GrowthError| Err(of_growth(error)))
        };
        let median = quantile(0.5)?;
        let error = self.prospect.node_error(day) * log_gain(start, median);
        let spread = log_spread(self.ends, start, day).hypot(error);
        let side = |probability: f64| -> Result<f64, OriginError> {
            let own = (quantile(probability)?.ln_1p() - median.ln_1p()).abs();
            let beyond = own.hypot(normal_quantile(probability).abs() * spread) * (probability - 0.5).signum();
            Ok((median.ln_1p() + beyond).exp_m1().round().max(floor))
        };
        let levels = self.prospect.request.plan.levels().iter();
        let intervals =
            levels.map(|&level| Ok(Interval { level, low: side(0.5 - 0.5 * level)?, high: side(0.5 + 0.5 * level)? }));
        let intervals = intervals.collect::<Result<_, OriginError>>()?;
        Ok(DegreeAtDate { date, present: course.survival(day), expected, median, intervals })
    }

    /// Chances of a node over what is uncertain.
    fn chances(&self, start: u64, threshold: u64) -> Result<Chances, OriginError> {
        let (at_least, passed) = self.along(&self.central, start, threshold)?;
        let sides = self
            .sides
            .iter()
            .map(|(low, high)| Ok((self.along(low, start, threshold)?, self.along(high, start, threshold)?)));
        let sides = sides.collect::<Result<Vec<_>, OriginError>>()?;
        let mut found = Chances { at_least: Vec::new(), passed: Vec::new(), doubt: Vec::new() };
        let mut highest: f64 = 0.0;
        for i in 0..self.days.len() {
            let now = blurred(at_least[i], sides.iter().map(|(low, high)| (low.0[i], high.0[i])));
            let ever = blurred(passed[i], sides.iter().map(|(low, high)| (low.1[i], high.1[i])));
            let variance: f64 = sides.iter().map(|(low, high)| (0.5 * (high.1[i] - low.1[i])).powi(2)).sum();
            highest = highest.max(ever);
            // Being past a threshold may end where links are lost; having been cannot.
            found.at_least.push(now.min(highest));
            found.passed.push(highest);
            found.doubt.push(variance.sqrt());
        }
        Ok(found)
    }

    /// Probabilities of being past a threshold and of having been, at each day.
    fn along(&self, way: &Way, start: u64, threshold: u64) -> Result<(Vec<f64>, Vec<f64>), OriginError> {
        self.check()?;
        let (course, forces) = (way.course, way.course.parameters());
        let at = |(law, &day): (&MixedLaw, &f64)| {
            let tail = law.tail(&[(start, 1.0)], threshold, Accuracy::Working).map_err(of_growth)?;
            Ok(course.survival(day) * tail)
        };
        let at_least = way.laws.iter().zip(&self.days).map(at).collect::<Result<Vec<f64>, OriginError>>()?;
        // Without losses nobody comes back; nodes that do not grow alike are followed by where they stand.
        let passed = if forces.has_losses() && forces.grow_alike() {
            self.passed(way, start, threshold, &at_least)?
        } else {
            at_least.clone()
        };
        Ok((at_least, passed))
    }

    /// Probabilities of having been past a threshold, at each day; where they do not settle, of being past it.
    fn passed(&self, way: &Way, start: u64, threshold: u64, at_least: &[f64]) -> Result<Vec<f64>, OriginError> {
        let every = self.days.len().div_ceil(MOST_DAYS);
        let last = self.days.len().saturating_sub(1);
        let places: Vec<usize> = (0..=last).filter(|i| (last - i).is_multiple_of(every)).collect();
        let days: Vec<f64> = places.iter().map(|&i| self.days[i]).collect();
        let found = match Passage::of(way.course, way.factor, start, threshold, &days) {
            Err(GrowthError::Integration { .. }) => return Ok(at_least.to_vec()),
            found => found.map_err(of_growth)?,
        };
        let at = |i: usize| {
            let after = places.partition_point(|&place| place < i).min(places.len() - 1);
            let (day, p) = (days[after], found[after]);
            let (day_before, p_before) = after.checked_sub(1).map_or((0.0, 0.0), |b| (days[b], found[b]));
            p_before + (p - p_before) * ((self.days[i] - day_before) / (day - day_before)).clamp(0.0, 1.0)
        };
        Ok((0..=last).map(at).collect())
    }

    fn class(&self, class: &WatchedClass) -> Result<ClassAnswer, OriginError> {
        let members: Vec<(u64, u64)> =
            self.prospect.counts.iter().filter(|(k, _)| (class.from..=class.to).contains(k)).collect();
        let mut passing = Vec::new();
        for &threshold in self.thresholds.iter().filter(|&&threshold| threshold > class.to) {
            let mut sums = vec![[Sum::default(); 2]; self.asked.len()];
            for &(degree, nodes) in &members {
                self.check()?;
                let chances = self.chances(degree, threshold)?;
                for (sum, &i) in sums.iter_mut().zip(&self.asked) {
                    sum[0].add(nodes as f64, chances.at_least[i], chances.doubt[i]);
                    sum[1].add(nodes as f64, chances.passed[i], chances.doubt[i]);
                }
            }
            let plan = &self.prospect.request.plan;
            let dates = plan.dates().iter().zip(&sums).map(|(&date, [now, ever])| ClassAtDate {
                date,
                at_least: now.forecast(plan.levels()),
                passed: ever.forecast(plan.levels()),
            });
            passing.push(ClassPassing { threshold, dates: dates.collect() });
        }
        let nodes = members.iter().map(|(_, nodes)| nodes).sum();
        Ok(ClassAnswer { class: *class, nodes, passing })
    }
}

/// The mean of a probability over what is uncertain: on the scale of normal deviations z it moves by half of what its sides are
/// apart, and E Φ(z + s·Z) = Φ(z/√(1 + s²)).
fn blurred(own: f64, sides: impl Iterator<Item = (f64, f64)>) -> f64 {
    let deviations = |p: f64| normal_quantile(p).clamp(-FARTHEST_DEVIATION, FARTHEST_DEVIATION);
    let variance: f64 = sides.map(|(low, high)| (0.5 * (deviations(high) - deviations(low))).powi(2)).sum();
    if variance == 0.0 { own } else { normal_cdf(deviations(own) / (1.0 + variance).sqrt()) }
}

/// A sum of chances, independent of each other were the forces known.
#[derive(Debug, Clone, Copy, Default)]
struct Sum {
    mean: f64,
    variance: f64,
    doubt: f64,
}

impl Sum {
    fn add(&mut self, nodes: f64, probability: f64, doubt: f64) {
        self.mean += nodes * probability;
        self.variance += nodes * probability * (1.0 - probability);
        self.doubt += nodes * doubt;
    }

    fn forecast(&self, levels: &[f64]) -> AmountForecast {
        let law = CountLaw::new(0.0, self.mean, self.variance + self.doubt.powi(2));
        AmountForecast { expected: self.mean, intervals: law.intervals(levels) }
    }
}

/// The first day by which a probability is reached, linear between days.
fn date_at(days: &[f64], passed: &[f64], probability: f64) -> Option<f64> {
    let reached = passed.iter().position(|&p| p >= probability)?;
    let (day, p) = (*days.get(reached)?, *passed.get(reached)?);
    let (day_before, p_before) = reached.checked_sub(1).map_or((0.0, 0.0), |i| (days[i], passed[i]));
    let part = if p > p_before { (probability - p_before) / (p - p_before) } else { 1.0 };
    Some(day_before + part * (day - day_before))
}

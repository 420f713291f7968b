//! Forecasts at each date of a plan.

use super::largest::{DegreeRange, LargestLaw, largest_degree};
use super::{CountForecast, CountLaw, DateForecast, ForecastError, TailForecast, TailLaw};
use crate::growth::{Course, GrowthError, NetworkLaw, TailSum};
use crate::model::{Change, DegreeCounts, ForecastPlan, GrowthParameters, ParameterFault, Shift};
use crate::numerics::tolerances::Accuracy;

/// The forces one standard deviation below and above their estimates in one direction of uncertainty; directions are
/// independent of each other.
#[derive(Debug, Clone, PartialEq)]
pub struct Excursion {
    /// Below.
    pub low: GrowthParameters,
    /// Above.
    pub high: GrowthParameters,
}

impl CountForecast {
    /// Keeps every quantile at most that of a count that can only be larger, such as the tail of a lower threshold: each law
    /// is fitted to its own two moments, and two such laws may cross.
    fn bound_by(&mut self, larger: &Self) {
        self.median = self.median.min(larger.median);
        for (own, larger) in self.intervals.iter_mut().zip(&larger.intervals) {
            own.low = own.low.min(larger.low);
            own.high = own.high.min(larger.high);
        }
    }
}

/// What is believed of a network's growth from its last snapshot on.
#[derive(Debug, Clone, PartialEq)]
pub struct Scenario {
    /// Best estimate of the forces.
    pub forces: GrowthParameters,
    /// Directions in which they are uncertain.
    pub excursions: Vec<Excursion>,
    /// Other candidates' forces with their weights, which with that of `forces` add up to one: tails are pooled geometrically. A
    /// candidate whose growth cannot be computed has no say.
    pub alternatives: Vec<(GrowthParameters, f64)>,
    /// Relative standard deviation of the flow past a threshold that no parameter accounts for.
    pub model_error: f64,
}

impl Scenario {
    /// The same under a change.
    ///
    /// # Errors
    /// When a rate comes out of range.
    pub fn under(&self, change: &Change) -> Result<Self, ParameterFault> {
        let excursion = |e: &Excursion| Ok(Excursion { low: change.apply(&e.low)?, high: change.apply(&e.high)? });
        let alternative = |(forces, weight): &(GrowthParameters, f64)| Ok((change.apply(forces)?, *weight));
        let forces = change.apply(&self.forces)?;
        let mut excursions = self.excursions.iter().map(excursion).collect::<Result<Vec<_>, _>>()?;
        if let Some(Shift::To(plan)) = &change.arrivals
            && let Some((low, high)) = plan.sides()
        {
            let with = |plan| forces.clone().with_arrivals(plan);
            excursions.push(Excursion { low: with(low), high: with(high) });
        }
        Ok(Self {
            forces,
            excursions,
            alternatives: self.alternatives.iter().map(alternative).collect::<Result<_, _>>()?,
            model_error: self.model_error,
        })
    }
}

/// Forecasts the network with `counts` today at every date of `plan`; `cancelled` is asked before each threshold and
/// within its tails.
///
/// Formula: the variance of a count is its sampling variance under the central forces, plus for each excursion the square
/// of half the difference between its two ends' expectations (sigma points; exact for expectations that are quadratic in
/// the parameter), plus (model error × expected flow)². Its law has that mean and variance ([`CountLaw`]).
///
/// Cost: (1 + 2 × excursions) expectations a date and threshold.
///
/// # Errors
/// When growth cannot be computed, or on cancellation.
pub fn forecast(
    counts: &DegreeCounts,
    scenario: &Scenario,
    plan: &ForecastPlan,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<DateForecast>, ForecastError> {
    let outlook = Outlook::new(counts, scenario, plan, cancelled)?;
    plan.dates().iter().zip(plan.days()).map(|(&date, &day)| outlook.at(date, day)).collect()
}

/// Forecasts the totals and the largest degree as [`forecast`] does, and leaves the tails to others.
///
/// # Errors
/// Those of [`forecast`].
pub fn forecast_totals(
    counts: &DegreeCounts,
    scenario: &Scenario,
    plan: &ForecastPlan,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<DateForecast>, ForecastError> {
    let outlook = Outlook::new(counts, scenario, plan, cancelled)?;
    plan.dates().iter().zip(plan.days()).map(|(&date, &day)| outlook.totals(&outlook.laws(day)?, date, day)).collect()
}

/// The laws of the tails that [`forecast`] gives: one list a date, one law a threshold.
///
/// # Errors
/// Those of [`forecast`].
pub fn tail_laws(
    counts: &DegreeCounts,
    scenario: &Scenario,
    plan: &ForecastPlan,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<Vec<TailLaw>>, ForecastError> {
    let outlook = Outlook::new(counts, scenario, plan, cancelled)?;
    plan.days().iter().map(|&day| outlook.tails(&outlook.laws(day)?, outlook.central.nodes(day))).collect()
}

impl DateForecast {
    /// The same with tails, thresholds ascending, their quantiles kept in order.
    pub fn with_tail(mut self, tail: Vec<TailForecast>) -> Self {
        self.tail = tail;
        let mut bound = &self.nodes;
        for row in &mut self.tail {
            row.size.bound_by(bound);
            bound = &row.size;
        }
        self
    }
}

struct Outlook<'a> {
    counts: &'a DegreeCounts,
    central: Course,
    ends: Vec<(Course, Course)>,
    alternatives: Vec<(Course, f64)>,
    model_error: f64,
    plan: &'a ForecastPlan,
    cancelled: &'a dyn Fn() -> bool,
}

/// The network's law at one day, under the central forces and at both ends of each excursion.
struct Laws<'a> {
    central: NetworkLaw<'a>,
    ends: Vec<(NetworkLaw<'a>, NetworkLaw<'a>)>,
    alternatives: Vec<(NetworkLaw<'a>, f64)>,
}

impl<'a> Outlook<'a> {
    fn new(
        counts: &'a DegreeCounts,
        scenario: &Scenario,
        plan: &'a ForecastPlan,
        cancelled: &'a dyn Fn() -> bool,
    ) -> Result<Self, ForecastError> {
        let horizon = plan.days().last().copied().unwrap_or(0.0);
        let course = |forces: &GrowthParameters| Course::new(counts, forces.clone(), horizon);
        let central = course(&scenario.forces)?;
        let ends = scenario.excursions.iter().map(|e| Ok((course(&e.low)?, course(&e.high)?)));
        let ends = ends.collect::<Result<Vec<_>, ForecastError>>()?;
        let others = scenario.alternatives.iter();
        let alternatives = others.filter_map(|(forces, weight)| Some((course(forces).ok()?, *weight))).collect();
        Ok(Self { counts, central, ends, alternatives, model_error: scenario.model_error, plan, cancelled })
    }

    fn laws(&self, day: f64) -> Result<Laws<'_>, ForecastError> {
        let law = |course| Ok::<_, GrowthError>(NetworkLaw::at(course, self.counts, day)?.until(self.cancelled));
        let ends = self.ends.iter().map(|(low, high)| Ok((law(low)?, law(high)?)));
        let ends = ends.collect::<Result<_, GrowthError>>()?;
        let alternatives = self.alternatives.iter().map(|(course, weight)| Ok((law(course)?, *weight)));
        Ok(Laws { central: law(&self.central)?, ends, alternatives: alternatives.collect::<Result<_, GrowthError>>()? })
    }

    fn at(&self, date: jiff::Timestamp, day: f64) -> Result<DateForecast, ForecastError> {
        let laws = self.laws(day)?;
        let totals = self.totals(&laws, date, day)?;
        let nodes = totals.nodes.expected;
        let tail = self.tails(&laws, nodes)?;
        Ok(totals.with_tail(tail.iter().map(|law| law.forecast(self.plan.levels())).collect()))
    }

    fn tails(&self, laws: &Laws, nodes: f64) -> Result<Vec<TailLaw>, ForecastError> {
        self.plan.thresholds().iter().map(|&j| self.tail(laws, j, nodes)).collect()
    }

    fn totals(&self, laws: &Laws, date: jiff::Timestamp, day: f64) -> Result<DateForecast, ForecastError> {
        let (nodes, links) = (self.nodes(day), self.link_ends(day));
        Ok(DateForecast { date, nodes, links, largest_degree: self.largest(laws)?, tail: Vec::new() })
    }

    fn tail(&self, laws: &Laws, threshold: u64, nodes: f64) -> Result<TailLaw, ForecastError> {
        if (self.cancelled)() {
            return Err(ForecastError::Cancelled);
        }
        let now = self.counts.tail_size(threshold) as f64;
        let TailSum { kept, mean: central, variance: chance, third_cumulant, .. } =
            laws.central.tail(threshold, Accuracy::Full)?;
        let (mean, disagreement) = pooled(laws, threshold, central)?;
        let beyond = excursion_variance(&laws.ends, |law| Ok(law.rough_tail(threshold)?.mean))?;
        // Nodes that come past the threshold and nodes that leave the tail are what the model can be wrong about; of a tail
        // that all but vanishes it is not wrong by all that was lost.
        // And a threshold that nearly every node passes leaves little to be wrong about.
        let flow = ((mean - kept) + (now - kept).min(kept)) * (1.0 - mean / nodes).max(0.0);
        let variance = chance + beyond + disagreement + (self.model_error * flow).powi(2);
        let law = match self.central.parameters().has_losses() {
            true => CountLaw::of_cumulants(mean, variance, third_cumulant),
            false => CountLaw::new(kept, mean - kept, variance),
        };
        Ok(TailLaw { threshold, now, law, chance })
    }

    fn nodes(&self, day: f64) -> CountForecast {
        let now = self.counts.nodes() as f64;
        let (survival, mean) = (self.central.survival(day), self.central.nodes(day));
        let certain = if survival == 1.0 { now } else { 0.0 };
        // Arrivals are Poisson; of the present nodes a binomial number stays.
        let sampling = (mean - now * survival) + now * survival * (1.0 - survival);
        let beyond = excursion_variance(&self.ends, |course| Ok(course.nodes(day))).unwrap_or(0.0);
        self.count(now, certain, mean, sampling + beyond)
    }

    fn link_ends(&self, day: f64) -> CountForecast {
        let now = self.counts.link_ends() as f64;
        let forces = self.central.parameters();
        let mean = self.central.link_ends(day);
        let certain = if forces.has_losses() { 0.0 } else { now };
        // Each arrival brings ℓ + ē ends at once, so their number scatters by that factor more than arrivals do; an end that
        // may be lost or not is one more draw.
        let per_arrival = (forces.links_per_arrival() + forces.entry.mean()).max(1.0);
        // A departing node takes its own ends along, besides what each end may lose.
        let hazard = forces.end_loss_hazard() + forces.departure_hazard();
        let gained = (mean - now * (-hazard * day).exp()).max(0.0);
        let kept = (mean - gained).max(0.0);
        let sampling = per_arrival * gained + kept * (1.0 - kept / now.max(1.0));
        let beyond = excursion_variance(&self.ends, |course| Ok(course.link_ends(day))).unwrap_or(0.0);
        self.count(now, certain, mean, sampling + beyond)
    }

    fn largest(&self, laws: &Laws) -> Result<super::DegreeForecast, ForecastError> {
        if (self.cancelled)() {
            return Err(ForecastError::Cancelled);
        }
        let range = DegreeRange::of(self.counts, self.central.parameters().has_losses());
        let mut largest = LargestLaw::new(&laws.central, &range);
        let median = largest.quantile(0.5)?;
        let gain = (median.ln_1p() - (self.counts.largest() as f64).ln_1p()).abs();
        let shift = range.shift(&laws.central, median)?;
        let variance = excursion_variance(&laws.ends, shift)? + (self.model_error * gain).powi(2);
        largest_degree(&mut largest, median, self.plan.levels(), variance.sqrt(), self.cancelled)
    }

    fn count(&self, now: f64, certain: f64, mean: f64, variance: f64) -> CountForecast {
        let law = CountLaw::new(certain, mean - certain, variance);
        CountForecast { now, expected: mean, median: law.quantile(0.5), intervals: law.intervals(self.plan.levels()) }
    }
}

/// The weighted geometric mean of the candidates' expectations, and by how much they disagree about it: Σ w·(own − mean)².
fn pooled(laws: &Laws, threshold: u64, central: f64) -> Result<(f64, f64), ForecastError> {
    let mut means = vec![(central, 1.0 - laws.alternatives.iter().map(|(_, weight)| weight).sum::<f64>())];
    for (law, weight) in &laws.alternatives {
        means.push((law.tail(threshold, Accuracy::Full)?.mean, *weight));
    }
    let [_, _, ..] = means[..] else { return Ok((central, 0.0)) };
    let log = means.iter().map(|(mean, weight)| weight * mean.max(f64::MIN_POSITIVE).ln()).sum::<f64>();
    let mean = log.exp();
    Ok((mean, means.iter().map(|(own, weight)| weight * (own - mean).powi(2)).sum()))
}

/// Σ over excursions of (½·(value at the high end − value at the low end))².
fn excursion_variance<T>(
    ends: &[(T, T)],
    mut value: impl FnMut(&T) -> Result<f64, ForecastError>,
) -> Result<f64, ForecastError> {
    let mut variance = 0.0;
    for (low, high) in ends {
        variance += (0.5 * (value(high)? - value(low)?)).powi(2);
    }
    Ok(variance)
}

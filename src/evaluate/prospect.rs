//! The forecast as a law: the tail past any threshold at any date, as things stand or under a change.

use jiff::{SignedDuration, Timestamp};

use super::ahead::GivenRates;
use super::pooled::PooledOutlook;
use super::record::OriginRecord;
use super::{OriginError, OriginRequest, is_pooled};
use crate::forecast::{ForecastError, Scenario, TailLaw, tail_laws};
use crate::growth::{Course, GrowthError};
use crate::model::{
    Change, DegreeCounts, ForecastPlan, GrowthParameters, Levels, ParameterFault, PlanFault, Shift, Thresholds,
    days_between,
};

/// Seconds of a day.
const DAY_SECONDS: f64 = 86_400.0;

/// Courses at both ends of each direction in which the forces are uncertain.
pub(super) type Ends = Vec<(Course, Course)>;

/// What is believed of the network from its newest snapshot on.
pub(super) struct Prospect<'a> {
    /// What was asked.
    pub request: &'a OriginRequest,
    /// Today's counts.
    pub counts: &'a DegreeCounts,
    /// The fitted forces and how uncertain they are.
    pub scenario: Scenario,
    /// The pooled forecast; none: by the fitted forces.
    pub pooled: Option<PooledOutlook<'a>>,
    /// Asked between thresholds.
    pub cancelled: &'a dyn Fn() -> bool,
}

impl<'a> Prospect<'a> {
    /// Ready for dates so many `days` ahead.
    ///
    /// # Errors
    /// Cancellation.
    pub fn new(
        request: &'a OriginRequest,
        scenario: Scenario,
        past: &[OriginRecord],
        days: &[f64],
        cancelled: &'a dyn Fn() -> bool,
    ) -> Result<Self, OriginError> {
        let pooled = match is_pooled(request).then(|| PooledOutlook::new(request, past, days, cancelled)) {
            Some(Ok(pooled)) => Some(pooled),
            // Without a candidate there is nothing to pool.
            None | Some(Err(OriginError::NoPeriod)) => None,
            Some(Err(error)) => return Err(error),
        };
        let counts = &request.evidence.latest().counts;
        Ok(Self { request, counts, scenario, pooled, cancelled })
    }

    /// The laws of the tails of `plan` under `change`: one list a date, one law a threshold.
    ///
    /// Of a pooled forecast every member follows other arrivals and links. What else is changed moves the pooled tails in the
    /// proportion in which it moves those of the fitted forces, for only these have a mechanism to change.
    ///
    /// # Errors
    /// Cancellation; growth that cannot be computed; a rate out of range.
    pub fn tails(&self, plan: &ForecastPlan, change: &Change) -> Result<Vec<Vec<TailLaw>>, OriginError> {
        let Some(pooled) = &self.pooled else {
            let scenario = self.scenario.under(change).map_err(OriginError::Rate)?;
            return Ok(tail_laws(self.counts, &scenario, plan, self.cancelled)?);
        };
        let standing = pooled.tails(plan, &rates_under(pooled.given(), change))?;
        if !change.is_of_mechanism() {
            return Ok(standing);
        }
        let alike = self.takes_alike(change);
        let before = self.central_tails(plan, &change.of_rates(), alike)?;
        let after = self.central_tails(plan, change, alike)?;
        let falls = self.forces(change)?.has_losses();
        let moved = standing.iter().zip(before.iter().zip(&after)).map(|(standing, (before, after))| {
            let pairs = before.iter().zip(after);
            let scaled = |(law, (before, after)): (&TailLaw, (&TailLaw, &TailLaw))| {
                let (mean, standing) = (before.mean(), law.mean());
                if mean <= 0.0 || standing <= 0.0 {
                    return *law;
                }
                // Of next to nothing no ratio tells: no more than what the fitted law has coming is added.
                let most = (standing + after.mean()) / standing;
                law.scaled((after.mean() / mean).min(most), falls)
            };
            standing.iter().zip(pairs).map(scaled).collect()
        });
        Ok(moved.collect())
    }

    /// The same by the fitted forces with what is uncertain of them, also under a pool: its members say where a tail stands at dates of
    /// periods, and nothing of the way there.
    ///
    /// # Errors
    /// Those of [`Self::tails`].
    pub fn fitted_tails(&self, plan: &ForecastPlan, change: &Change) -> Result<Vec<Vec<TailLaw>>, OriginError> {
        let scenario = self.believed(change, self.takes_alike(change))?;
        Ok(tail_laws(self.counts, &scenario, plan, self.cancelled)?)
    }

    /// The same by the fitted forces alone, without what is uncertain of them.
    fn central_tails(
        &self,
        plan: &ForecastPlan,
        change: &Change,
        alike: bool,
    ) -> Result<Vec<Vec<TailLaw>>, OriginError> {
        let forces = self.believed(change, alike)?.forces;
        let scenario = Scenario { forces, excursions: Vec::new(), alternatives: Vec::new(), model_error: 0.0 };
        Ok(tail_laws(self.counts, &scenario, plan, self.cancelled)?)
    }

    /// Whether what `change` would do is told by nodes that grow alike: a cap needs that, and a pool has such members.
    pub fn takes_alike(&self, change: &Change) -> bool {
        self.pooled.is_some() && change.degree_cap.is_some()
    }

    /// The fitted forces and how uncertain they are under `change`; those of nodes that grow `alike` where asked.
    fn believed(&self, change: &Change, alike: bool) -> Result<Scenario, OriginError> {
        let mut scenario = self.scenario.clone();
        if alike {
            let strip = |forces: &mut GrowthParameters| -> Result<(), ParameterFault> {
                let plain = forces.clone().with_dormant_share(0.0)?.with_growth_variance(0.0)?;
                *forces = plain.with_kernel_exponent(1.0)?;
                Ok(())
            };
            let ends = scenario.excursions.iter_mut().flat_map(|e| [&mut e.low, &mut e.high]);
            let mut all = std::iter::once(&mut scenario.forces).chain(ends);
            all.try_for_each(strip).map_err(OriginError::Rate)?;
        }
        scenario.under(change).map_err(OriginError::Rate)
    }

    /// The fitted forces under `change`.
    ///
    /// # Errors
    /// A rate out of range.
    pub fn forces(&self, change: &Change) -> Result<GrowthParameters, OriginError> {
        Ok(self.believed(change, self.takes_alike(change))?.forces)
    }

    /// The course under `change` up to day `horizon`.
    ///
    /// # Errors
    /// Growth that cannot be computed; a rate out of range; cancellation.
    pub fn course(&self, change: &Change, horizon: f64) -> Result<Course, OriginError> {
        self.course_of(&self.forces(change)?, horizon)
    }

    /// The course under `change`, and those at both ends of each direction in which the forces are uncertain; of nodes that grow
    /// `alike` where asked.
    ///
    /// # Errors
    /// Growth that cannot be computed; a rate out of range; cancellation.
    pub fn courses(&self, change: &Change, horizon: f64, alike: bool) -> Result<(Course, Ends), OriginError> {
        let scenario = self.believed(change, alike)?;
        let course = |forces: &GrowthParameters| self.course_of(forces, horizon);
        let ends = scenario.excursions.iter().map(|e| Ok((course(&e.low)?, course(&e.high)?)));
        Ok((course(&scenario.forces)?, ends.collect::<Result<_, OriginError>>()?))
    }

    /// [`Self::courses`], the ends alone.
    ///
    /// # Errors
    /// Those of [`Self::courses`].
    pub fn ends(&self, change: &Change, horizon: f64) -> Result<Ends, OriginError> {
        Ok(self.courses(change, horizon, self.takes_alike(change))?.1)
    }

    fn course_of(&self, forces: &GrowthParameters, horizon: f64) -> Result<Course, OriginError> {
        self.check()?;
        Course::new(self.counts, forces.clone(), horizon).map_err(of_growth)
    }

    /// Whether to go on.
    ///
    /// # Errors
    /// Cancellation.
    pub fn check(&self) -> Result<(), OriginError> {
        if (self.cancelled)() { Err(ForecastError::Cancelled.into()) } else { Ok(()) }
    }

    /// Relative error of a flow `day` days ahead that no parameter accounts for.
    pub fn model_error(&self, day: f64) -> f64 {
        self.pooled.as_ref().map_or(self.scenario.model_error, |pooled| pooled.flow_error(day))
    }

    /// Relative error of one node's own growth: a record of flows tells that of many nodes together, and single ones go their own ways.
    pub fn node_error(&self, day: f64) -> f64 {
        self.model_error(day).max(self.scenario.model_error)
    }

    /// A plan for one threshold.
    ///
    /// # Errors
    /// Dates that no forecast takes.
    pub fn plan(&self, thresholds: &[u64], days: &[f64]) -> Result<ForecastPlan, OriginError> {
        let as_of = self.request.evidence.latest().as_of;
        let dates: Vec<Timestamp> = days.iter().filter_map(|&day| date_after(as_of, day)).collect();
        let unplanned = |faults: Vec<PlanFault>| {
            OriginError::Unplanned(faults.first().map(|fault| fault.detail.clone()).unwrap_or_default())
        };
        let thresholds = Thresholds::new(thresholds).map_err(unplanned)?;
        ForecastPlan::new(as_of, thresholds, &dates, Levels::default()).map_err(unplanned)
    }

    /// The date so many days after the newest snapshot.
    pub fn date(&self, day: f64) -> Option<Timestamp> {
        date_after(self.request.evidence.latest().as_of, day)
    }

    /// Days from the newest snapshot to a date.
    pub fn day(&self, date: Timestamp) -> f64 {
        days_between(self.request.evidence.latest().as_of, date)
    }
}

/// Growth that cannot be computed is a forecast that cannot be given.
pub(super) fn of_growth(error: GrowthError) -> OriginError {
    OriginError::Forecast(error.into())
}

fn date_after(as_of: Timestamp, day: f64) -> Option<Timestamp> {
    let seconds = SignedDuration::try_from_secs_f64(day * DAY_SECONDS).ok()?;
    as_of.checked_add(seconds).ok()
}

/// The rates that pooled members follow under a change.
fn rates_under(given: GivenRates, change: &Change) -> GivenRates {
    let mut rates = given;
    match &change.arrivals {
        Some(Shift::To(plan)) => rates.arrivals = Some(plan.clone()),
        Some(Shift::Factor(factor)) => rates.arrivals_factor *= factor,
        None => {}
    }
    match change.links_per_arrival {
        Some(Shift::To(links)) => rates.links_per_arrival = Some(links),
        Some(Shift::Factor(factor)) => rates.links_factor *= factor,
        None => {}
    }
    rates
}

//! The rates that drive growth after an origin: given, or expected from what the snapshots before it show.

use super::arrivals::{forecast_arrivals, forecast_links_per_arrival};
use super::record::{Growth, Rate};
use crate::model::{ArrivalPlan, Evidence, GrowthParameters};

/// Standard deviation of ln ℓ where only the newest period tells it. A stated default, as for one period's rates in the fit.
const ONE_PERIOD_LINKS_SPREAD: f64 = 0.1;

/// Arrivals and landings.
#[derive(Debug, Clone, PartialEq)]
pub struct Rates {
    /// Arrivals from the origin on.
    pub arrivals: ArrivalPlan,
    /// ℓ, links that land on present nodes per arrival.
    pub links_per_arrival: f64,
    /// ι, links that land per present node and day.
    pub links_per_node_day: f64,
}

impl Rates {
    /// `forces` with these rates; none where one is out of range.
    pub(super) fn drive(&self, forces: &GrowthParameters) -> Option<GrowthParameters> {
        let forces = forces.clone().with_arrivals(self.arrivals.clone());
        let forces = forces.with_links_per_arrival(self.links_per_arrival).ok()?;
        forces.with_links_per_node_day(self.links_per_node_day).ok()
    }
}

/// Rates that the caller gives; the others are to be expected.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct GivenRates {
    pub arrivals: Option<ArrivalPlan>,
    pub links_per_arrival: Option<f64>,
    pub links_per_node_day: f64,
    /// On the arrivals, given or expected.
    pub arrivals_factor: f64,
    /// On the links per arrival, given or expected.
    pub links_factor: f64,
}

impl Default for GivenRates {
    fn default() -> Self {
        Self {
            arrivals: None,
            links_per_arrival: None,
            links_per_node_day: 0.0,
            arrivals_factor: 1.0,
            links_factor: 1.0,
        }
    }
}

/// The rates over `days` after the newest snapshot of `known`: those `given`, and for the others what is to be expected, with one of
/// them at one standard deviation to either side, given arrivals too where they are uncertain; losses and entry degrees are those of `forces`. Empty where there is no period.
pub(super) fn expected_rates(
    known: &Evidence,
    forces: &GrowthParameters,
    days: f64,
    given: &GivenRates,
) -> Vec<(Growth, Rates)> {
    let Some(forecast) = forecast_arrivals(known, forces.departure_hazard(), days) else { return Vec::new() };
    let arrivals = given.arrivals.as_ref().unwrap_or(&forecast.central);
    let (links, deviation) = match (given.links_per_arrival, forecast_links_per_arrival(known, forces, days)) {
        (Some(links), _) => (links, 0.0),
        (None, Some(outlook)) => (outlook.rate, outlook.log_deviation),
        (None, None) => (forces.links_per_arrival(), ONE_PERIOD_LINKS_SPREAD),
    };
    let rates = |arrivals: &ArrivalPlan, links_per_arrival| Rates {
        arrivals: arrivals.scaled(given.arrivals_factor),
        links_per_arrival: links_per_arrival * given.links_factor,
        links_per_node_day: given.links_per_node_day,
    };
    let all_given = given.arrivals.is_some() && given.links_per_arrival.is_some();
    let mut found = vec![(if all_given { Growth::Known } else { Growth::Expected }, rates(arrivals, links))];
    let sides = match &given.arrivals {
        Some(plan) => plan.sides(),
        None => Some((forecast.low.clone(), forecast.high.clone())),
    };
    if let Some((low, high)) = sides {
        found.push((Growth::Low(Rate::Arrivals), rates(&low, links)));
        found.push((Growth::High(Rate::Arrivals), rates(&high, links)));
    }
    if given.links_per_arrival.is_none() {
        found.push((Growth::Low(Rate::Links), rates(arrivals, links * (-deviation).exp())));
        found.push((Growth::High(Rate::Links), rates(arrivals, links * deviation.exp())));
    }
    found
}

//! What is asked besides the tails, in the one form that equal questions share.

use serde::Serialize;

use crate::model::{ArrivalPlan, Band, Bands, Change, Limit, Questions, RefusedLinks, Shift, Watch};
use crate::service::{Real, date_text};

/// Every question that is asked; those that are not are left out.
#[derive(Serialize)]
pub struct CanonicalQuestions<'a> {
    #[serde(skip_serializing_if = "Vec::is_empty")]
    limits: Vec<CanonicalLimit<'a>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    bands: Option<CanonicalBands<'a>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    watch: Option<CanonicalWatch<'a>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    next_hubs: Option<usize>,
    #[serde(skip_serializing_if = "Vec::is_empty")]
    scenarios: Vec<CanonicalChange<'a>>,
}

#[derive(Serialize)]
struct CanonicalLimit<'a> {
    name: Option<&'a str>,
    threshold: u64,
    max_nodes: u64,
    by: String,
    risk: Real,
}

#[derive(Serialize)]
struct CanonicalBands<'a> {
    unit: Option<&'a str>,
    /// `(from, to, per node, per link)`
    bands: Vec<(u64, Option<u64>, Real, Real)>,
}

#[derive(Serialize)]
struct CanonicalWatch<'a> {
    nodes: Vec<(&'a str, u64)>,
    classes: Vec<(u64, u64)>,
    thresholds: Option<&'a [u64]>,
}

/// Each force in place of another, or a factor on it.
#[derive(Serialize)]
#[serde(rename_all = "snake_case")]
enum CanonicalShift<T> {
    To(T),
    Factor(Real),
}

#[derive(Serialize)]
struct CanonicalChange<'a> {
    name: &'a str,
    arrivals: Option<CanonicalShift<CanonicalArrivals>>,
    links_per_arrival: Option<CanonicalShift<Real>>,
    preferential_share: Option<Real>,
    departures_per_node_day: Option<Real>,
    degree_cap: Option<(u64, &'static str)>,
}

#[derive(Serialize)]
struct CanonicalArrivals {
    /// `(days after the last snapshot, arrivals a day, growth a year)`
    segments: Vec<(Real, Real, Real)>,
    log_deviation: Real,
}

impl<'a> From<&'a Questions> for CanonicalQuestions<'a> {
    fn from(questions: &'a Questions) -> Self {
        Self {
            limits: questions.limits.iter().map(CanonicalLimit::from).collect(),
            bands: questions.bands.as_ref().map(CanonicalBands::from),
            watch: questions.watch.as_ref().map(CanonicalWatch::from),
            next_hubs: Some(questions.next_hubs).filter(|&ranks| ranks > 0),
            scenarios: questions.scenarios.iter().map(CanonicalChange::from).collect(),
        }
    }
}

impl<'a> From<&'a Limit> for CanonicalLimit<'a> {
    fn from(limit: &'a Limit) -> Self {
        Self {
            name: limit.name(),
            threshold: limit.threshold(),
            max_nodes: limit.max_nodes(),
            by: date_text(limit.by()),
            risk: Real(limit.risk()),
        }
    }
}

impl<'a> From<&'a Bands> for CanonicalBands<'a> {
    fn from(bands: &'a Bands) -> Self {
        let band = |band: &Band| (band.from, band.to, Real(band.per_node), Real(band.per_link));
        Self { unit: bands.unit(), bands: bands.bands().iter().map(band).collect() }
    }
}

impl<'a> From<&'a Watch> for CanonicalWatch<'a> {
    fn from(watch: &'a Watch) -> Self {
        Self {
            nodes: watch.nodes.iter().map(|node| (node.name.as_str(), node.degree)).collect(),
            classes: watch.classes.iter().map(|class| (class.from, class.to)).collect(),
            thresholds: watch.thresholds.as_ref().map(|thresholds| thresholds.values()),
        }
    }
}

impl<'a> From<&'a Change> for CanonicalChange<'a> {
    fn from(change: &'a Change) -> Self {
        let refused = |refused| match refused {
            RefusedLinks::Spread => "spread",
            RefusedLinks::Lost => "lost",
        };
        Self {
            name: &change.name,
            arrivals: change.arrivals.as_ref().map(|shift| CanonicalShift::of(shift, arrivals)),
            links_per_arrival: change.links_per_arrival.as_ref().map(|shift| CanonicalShift::of(shift, |&to| Real(to))),
            preferential_share: change.mix.map(|mix| Real(mix.preferential_share())),
            departures_per_node_day: change.departures_per_node_day.map(Real),
            degree_cap: change.degree_cap.map(|cap| (cap.links(), refused(cap.refused()))),
        }
    }
}

impl<T> CanonicalShift<T> {
    fn of<S>(shift: &Shift<S>, canonical: impl FnOnce(&S) -> T) -> Self {
        match shift {
            Shift::To(to) => Self::To(canonical(to)),
            Shift::Factor(factor) => Self::Factor(Real(*factor)),
        }
    }
}

fn arrivals(plan: &ArrivalPlan) -> CanonicalArrivals {
    let segments = plan.segments().iter();
    let segments = segments.map(|s| (Real(s.from_day), Real(s.per_day), Real(s.growth_per_year))).collect();
    CanonicalArrivals { segments, log_deviation: Real(plan.log_deviation()) }
}

//! What is asked of a comparison of kept scenarios, and the bodies of kept questions.

use jiff::Timestamp;
use serde_json::value::RawValue;

use super::arrivals::Stretch;
use super::outlook::too_many_cells;
use super::questions::{limit, scenarios};
use crate::api::decode::{At, Fault, Faults, Place, every_of, instant_of, object};
use crate::config::LimitsConfig;
use crate::model::{
    Change, Evidence, ForecastPlan, Horizon, HorizonEnd, Levels, Limit, Questions, StandingPlan, Thresholds,
};
use crate::report::readable;
use crate::service::{DEFAULT_SEED, FitRequest, ForecastInputs, OriginRequest, ServiceError};

pub use super::questions::LIMIT_FIELDS;
pub use super::questions::scenarios::CHANGE_FIELDS;

/// Most bytes of a kept scenario: many times what the longest plan of arrivals takes.
const MAX_BODY_BYTES: usize = 65_536;

/// Reads a limit to keep; its name stands in its address.
pub fn read_kept_limit(raw: &RawValue, name: String, faults: &mut Faults) -> Option<Limit> {
    let given = object(raw, At::ROOT, &LIMIT_FIELDS, faults)?;
    limit(&given, At::ROOT, Some(name), faults)
}

/// Reads a scenario to keep, as it is kept: its own text. Its arrivals are held against a snapshot when it is compared.
pub fn read_kept_change(raw: &RawValue, faults: &mut Faults) -> Option<String> {
    if raw.get().len() > MAX_BODY_BYTES {
        faults
            .add(&At::ROOT, format!("a scenario has at most {MAX_BODY_BYTES} bytes; give fewer segments of arrivals"));
        return None;
    }
    read_change(raw, String::new(), Stretch::UNKNOWN, faults).map(|_| raw.get().trim().to_owned())
}

fn read_change(raw: &RawValue, name: String, stretch: Stretch, faults: &mut Faults) -> Option<Change> {
    let given = object(raw, At::ROOT, &CHANGE_FIELDS, faults)?;
    scenarios::change(&given, At::ROOT, name, stretch, faults)
}

/// What a comparison is asked for in its query; what is left out comes from the network's plan.
#[derive(Debug, Clone, Default)]
pub struct ComparisonQuery {
    /// Names of scenarios; all when left out.
    pub scenarios: Option<Vec<String>>,
    /// Thresholds.
    pub thresholds: Option<Thresholds>,
    /// The last date.
    pub until: Option<Timestamp>,
    /// The step of dates up to it.
    pub every: Option<jiff::Span>,
}

impl ComparisonQuery {
    /// Reads the query's parameters.
    pub fn read(given: &[(String, String)], faults: &mut Faults) -> Self {
        let text = |name: &str| given.iter().find(|(found, _)| found == name).map(|(_, value)| value.as_str());
        let mut noted = |name: &str, detail: String| faults.push(Fault { place: Place::Query(name.into()), detail });
        let scenarios = text("scenarios").map(|list| list.split(',').map(str::to_owned).collect::<Vec<_>>());
        if let Some(names) = &scenarios
            && let Some(twice) = names.iter().enumerate().find(|(i, name)| names.iter().take(*i).any(|n| n == *name))
        {
            noted("scenarios", format!("the scenario {:?} is named twice", twice.1));
        }
        let thresholds = text("thresholds").and_then(|list| match thresholds(list) {
            Ok(thresholds) => Some(thresholds),
            Err(detail) => {
                noted("thresholds", detail);
                None
            }
        });
        let until = text("until").map(instant_of).transpose().map_err(|detail| noted("until", detail)).ok().flatten();
        let every = text("every").map(every_of).transpose().map_err(|detail| noted("every", detail)).ok().flatten();
        if text("every").is_some() && text("until").is_none() {
            noted("every", "every is the step of dates up to until; give until too".into());
        }
        Self { scenarios, thresholds, until, every }
    }

    /// The inputs of the comparison, from what is stored of a network.
    ///
    /// # Errors
    /// When a scenario is not kept, there is none, or neither query nor plan says for what to compare.
    pub fn inputs(
        self,
        evidence: Evidence,
        standing: Option<&StandingPlan>,
        (limits, kept): (Vec<Limit>, Vec<(String, String)>),
        config: &LimitsConfig,
        faults: &mut Faults,
    ) -> Result<Option<ForecastInputs>, ServiceError> {
        let kept = self.chosen(kept)?;
        let latest = evidence.latest().as_of;
        let thresholds = self.thresholds.clone().or(standing.map(|plan| plan.thresholds.clone()));
        let dates = match (self.until, self.every, standing) {
            (Some(until), None, _) => Some(vec![until]),
            (Some(until), Some(every), _) => Some(Horizon { end: HorizonEnd::Until(until), every }.dates(latest)),
            (None, _, standing) => standing.map(|plan| plan.horizon.dates(latest)),
        };
        let (Some(thresholds), Some(dates)) = (thresholds, dates) else { return Err(ServiceError::NoPlan) };
        let levels = standing.map(|plan| plan.levels.clone()).unwrap_or_default();
        let Some(plan) = plan(latest, thresholds, &dates, levels, self.until.is_some(), faults)? else {
            return Ok(None);
        };
        // Where the query gives other dates, the planned arrivals still hold.
        let arrivals = match standing.and_then(|plan| plan.arrivals.as_ref()) {
            Some(planned) => {
                let until = plan.dates().iter().copied().chain(limits.iter().map(Limit::by)).max().unwrap_or(latest);
                let found = planned.at(latest, until).map_err(|found| {
                    let words: Vec<String> = found.iter().take(3).map(ToString::to_string).collect();
                    ServiceError::Impossible(format!("forecast_plan: {}", words.join("; ")))
                });
                Some(found?)
            }
            None => None,
        };
        let stretch = Stretch::of(Some(latest), Some(&plan), &limits);
        let scenarios = kept.iter().map(|(name, body)| stored_change(name, body, stretch));
        let scenarios = scenarios.collect::<Result<Vec<_>, _>>()?;
        let questions = Questions { limits, scenarios, ..Questions::default() };
        let cells = too_many_cells(&plan, config);
        if let Some(detail) = cells {
            let name = if self.until.is_some() { "until" } else { "thresholds" };
            faults.push(Fault { place: Place::Query(name.into()), detail });
            return Ok(None);
        }
        if !super::questions::work::within(&questions, &plan, config, faults) {
            return Ok(None);
        }
        let fit = FitRequest { seed: DEFAULT_SEED, ..FitRequest::default() };
        let request = OriginRequest { evidence, fit, arrivals, plan, questions };
        Ok(Some(ForecastInputs { label: None, request }))
    }

    /// The scenarios that are asked for, in the order asked.
    fn chosen(&self, mut kept: Vec<(String, String)>) -> Result<Vec<(String, String)>, ServiceError> {
        if let Some(names) = &self.scenarios {
            let missing = names.iter().filter(|&name| !kept.iter().any(|(found, _)| found == name));
            let missing: Vec<String> = missing.map(|name| name.chars().take(100).collect()).take(10).collect();
            if !missing.is_empty() {
                return Err(ServiceError::NoScenarios(missing));
            }
            let place = |name: &str| names.iter().position(|asked| asked == name);
            kept.retain(|(name, _)| place(name).is_some());
            kept.sort_by_key(|(name, _)| place(name));
        }
        if kept.is_empty() { Err(ServiceError::NothingToCompare) } else { Ok(kept) }
    }
}

fn thresholds(list: &str) -> Result<Thresholds, String> {
    let values: Result<Vec<u64>, _> = list.split(',').map(str::parse).collect();
    let values =
        values.map_err(|_| "thresholds are whole numbers with commas between, as in 10,100,1000".to_owned())?;
    Thresholds::new(&values).map_err(|found| found.first().map(|fault| readable(&fault.detail)).unwrap_or_default())
}

/// The plan; what is wrong with dates of the query is its caller's fault, with those of the network's plan it is impossible.
fn plan(
    latest: Timestamp,
    thresholds: Thresholds,
    dates: &[Timestamp],
    levels: Levels,
    given: bool,
    faults: &mut Faults,
) -> Result<Option<ForecastPlan>, ServiceError> {
    let detail = match ForecastPlan::new(latest, thresholds, dates, levels) {
        Ok(plan) => return Ok(Some(plan)),
        Err(_) if dates.is_empty() => {
            "there is no date after the newest snapshot to compare at; give a later until".into()
        }
        Err(found) => found.first().map(|fault| readable(&fault.detail)).unwrap_or_default(),
    };
    if given {
        faults.push(Fault { place: Place::Query("until".into()), detail });
        return Ok(None);
    }
    Err(ServiceError::Impossible(format!("forecast_plan: {detail}")))
}

/// A kept scenario, from the newest snapshot on.
fn stored_change(name: &str, body: &str, stretch: Stretch) -> Result<Change, ServiceError> {
    let raw: &RawValue = serde_json::from_str(body)
        .map_err(|error| ServiceError::Broken(format!("a scenario that was never kept: {error}")))?;
    let mut faults = Faults::default();
    let change = read_change(raw, name.to_owned(), stretch, &mut faults);
    change.ok_or_else(|| {
        let (found, _) = faults.into_parts();
        let words = found.first().map(|fault| fault.detail.clone()).unwrap_or_default();
        ServiceError::Impossible(format!("the scenario {name:?} does not fit the newest snapshot: {words}"))
    })
}

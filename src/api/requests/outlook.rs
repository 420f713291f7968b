//! What is asked about the future: thresholds, dates, levels, and with them arrivals; for one forecast, or as a network's standing plan.

use jiff::Timestamp;
use serde_json::value::RawValue;

use super::arrivals::given_arrivals;
use crate::api::decode::{At, Faults, Object, every, instant, list, object, real, whole};
use crate::config::LimitsConfig;
use crate::model::{ForecastPlan, Horizon, HorizonEnd, Levels, MAX_DEGREE, PlanFault, StandingPlan, Thresholds};
use crate::report::readable;

/// Fields of a network's forecast plan.
pub const PLAN_FIELDS: [&str; 4] = ["thresholds", "horizon", "levels", "arrivals"];

/// The snapshot that a plan's horizon is tried from before there is one: its first day of a leap year.
const TRIAL_DATE: &str = "2000-01-01T00:00:00Z";

/// A network's plan.
pub fn standing_plan(raw: &RawValue, at: At<'_>, limits: &LimitsConfig, faults: &mut Faults) -> Option<StandingPlan> {
    let given = object(raw, at, &PLAN_FIELDS, faults)?;
    let thresholds = given.required("thresholds", &at, faults);
    let thresholds = thresholds.and_then(|raw| thresholds_of(raw, at, faults));
    let levels = match given.get("levels") {
        Some(raw) => levels_of(raw, at, faults),
        None => Some(Levels::default()),
    };
    let horizon = given.required("horizon", &at, faults);
    let horizon = horizon.and_then(|raw| horizon_of(raw, at.field("horizon"), faults));
    let arrivals = match given.get("arrivals") {
        Some(raw) => given_arrivals(raw, at.field("arrivals"), faults).map(Some),
        None => Some(None),
    };
    let given = arrivals?;
    let arrivals = given.as_ref().map(|given| given.arrivals.clone());
    let plan = StandingPlan { thresholds: thresholds?, levels: levels?, horizon: horizon?, arrivals };
    // How many dates there are until a given one shows at a snapshot.
    if let HorizonEnd::After(_) = plan.horizon.end {
        let from = TRIAL_DATE.parse().ok()?;
        let dates = plan.horizon.dates(from);
        if dates.is_empty() {
            faults.add(
                &at.field("horizon").field("ends_after"),
                "the horizon ends before its first date: ends_after is shorter than every",
            );
            return None;
        }
        let tried = ForecastPlan::new(from, plan.thresholds.clone(), &dates, plan.levels.clone());
        tried.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, at, true, faults));
        if let Some(detail) = too_many_cells(&tried.ok()?, limits) {
            faults.add(&at.field("horizon"), detail);
            return None;
        }
        // So that seasons too many show now; a first segment that starts later shows at a snapshot.
        if let Some(given) = given {
            let first = given.arrivals.segments().first().and_then(|segment| segment.from);
            let first = first.unwrap_or(from);
            let until = plan.horizon.dates(first).last().copied();
            given.plan(at.field("arrivals"), Some(first), until, faults)?;
        }
    }
    Some(plan)
}

/// Thresholds, dates and levels; those of the network's plan where they were left out.
pub fn plan(
    body: &Object<'_>,
    latest: Option<Timestamp>,
    standing: Option<&StandingPlan>,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<ForecastPlan> {
    let root = At::ROOT;
    let thresholds = match (body.get("thresholds"), standing) {
        (None, Some(standing)) => Some(standing.thresholds.clone()),
        _ => body.required("thresholds", &root, faults).and_then(|raw| thresholds_of(raw, root, faults)),
    };
    let levels = match (body.get("levels"), standing) {
        (Some(raw), _) => levels_of(raw, root, faults),
        (None, standing) => Some(standing.map(|standing| standing.levels.clone()).unwrap_or_default()),
    };
    let (dates, stepped) = match (body.get("dates"), body.get("horizon"), standing) {
        (Some(raw), None, _) => (dates(raw, faults), false),
        (None, Some(raw), _) => (horizon(raw, latest, faults), true),
        (None, None, Some(standing)) => (planned_dates(standing, latest, faults), true),
        (given, ..) => {
            let detail = "give either dates, or a horizon to spread dates over";
            let also = if given.is_some() { ", not both" } else { "" };
            faults.add(&root, format!("{detail}{also}"));
            (None, false)
        }
    };
    // Dates are checked even when a threshold or level is wrong.
    let stand_in = Thresholds::new(&[1]).ok()?;
    let complete = thresholds.is_some() && levels.is_some();
    let (thresholds, levels) = (thresholds.unwrap_or(stand_in), levels.unwrap_or_default());
    let plan = ForecastPlan::new(latest?, thresholds, &dates?, levels);
    for fault in plan.as_ref().err().into_iter().flatten() {
        note(fault, root, stepped, faults);
    }
    let plan = plan.ok().filter(|_| complete)?;
    if let Some(detail) = too_many_cells(&plan, limits) {
        faults.add(&root.field(if stepped { "horizon" } else { "dates" }), detail);
        return None;
    }
    Some(plan)
}

pub(super) fn too_many_cells(plan: &ForecastPlan, limits: &LimitsConfig) -> Option<String> {
    let (thresholds, dates) = (plan.thresholds().len(), plan.dates().len());
    let cells = thresholds * dates;
    (cells > limits.cells).then(|| {
        format!(
            "{thresholds} thresholds at {dates} dates make {cells} answers; one forecast gives at most {}: split the \
             request",
            limits.cells
        )
    })
}

fn note(fault: &PlanFault, at: At<'_>, stepped: bool, faults: &mut Faults) {
    let list = at.field(if stepped && fault.field == "dates" { "horizon" } else { fault.field });
    match fault.index {
        Some(index) if !stepped => faults.add(&list.item(index), readable(&fault.detail)),
        _ => faults.add(&list, readable(&fault.detail)),
    }
}

pub(super) fn thresholds_of(raw: &RawValue, above: At<'_>, faults: &mut Faults) -> Option<Thresholds> {
    let at = above.field("thresholds");
    let mut values = Vec::new();
    let mut complete = true;
    list(raw, at, faults, |index, item, faults| {
        let value = whole(item, at.item(index), MAX_DEGREE, faults);
        complete &= value.is_some();
        // In place of what is no threshold stands a sound one, so that the others are checked and keep their index.
        values.push(value.unwrap_or(1));
    })?;
    let found = Thresholds::new(&values);
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, above, false, faults));
    found.ok().filter(|_| complete)
}

pub(super) fn levels_of(raw: &RawValue, above: At<'_>, faults: &mut Faults) -> Option<Levels> {
    let at = above.field("levels");
    let mut values = Vec::new();
    let mut complete = true;
    list(raw, at, faults, |index, item, faults| {
        let value = real(item, at.item(index), faults);
        complete &= value.is_some();
        // As with thresholds.
        values.push(value.unwrap_or(0.5));
    })?;
    let found = Levels::new(&values);
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, above, false, faults));
    found.ok().filter(|_| complete)
}

fn dates(raw: &RawValue, faults: &mut Faults) -> Option<Vec<Timestamp>> {
    let root = At::ROOT;
    let at = root.field("dates");
    let mut dates = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| dates.extend(instant(item, at.item(index), faults)))?;
    (dates.len() == length).then_some(dates)
}

/// The dates of a horizon that is given.
fn horizon(raw: &RawValue, latest: Option<Timestamp>, faults: &mut Faults) -> Option<Vec<Timestamp>> {
    let root = At::ROOT;
    let at = root.field("horizon");
    let given = horizon_of(raw, at, faults)?;
    let dates = given.dates(latest?);
    if dates.is_empty() {
        let (field, detail) = match given.end {
            HorizonEnd::Until(until) => {
                ("until", format!("{until} is before the first date, one step after the newest snapshot"))
            }
            HorizonEnd::After(after) => ("ends_after", format!("{after} is shorter than one step")),
        };
        faults.add(&at.field(field), detail);
        return None;
    }
    Some(dates)
}

fn horizon_of(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Horizon> {
    let given = object(raw, at, &["until", "ends_after", "every"], faults)?;
    let step = given.required("every", &at, faults).and_then(|raw| every(raw, at.field("every"), faults));
    let end = match (given.get("until"), given.get("ends_after")) {
        (Some(raw), None) => instant(raw, at.field("until"), faults).map(HorizonEnd::Until),
        (None, Some(raw)) => every(raw, at.field("ends_after"), faults).map(HorizonEnd::After),
        (given, _) => {
            let also = if given.is_some() { ", not both" } else { "" };
            faults.add(
                &at,
                format!("give either until, a date, or ends_after, a duration from the newest snapshot on{also}"),
            );
            None
        }
    };
    Some(Horizon { end: end?, every: step? })
}

/// The dates of a network's plan.
fn planned_dates(standing: &StandingPlan, latest: Option<Timestamp>, faults: &mut Faults) -> Option<Vec<Timestamp>> {
    let dates = standing.horizon.dates(latest?);
    if dates.is_empty() {
        let detail = "the horizon of the network's forecast_plan has no date after the newest snapshot; give dates or a \
                      horizon, or store another plan";
        faults.add(&At::ROOT, detail);
        return None;
    }
    Some(dates)
}

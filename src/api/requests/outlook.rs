//! What is asked about the future: arrivals, thresholds, dates, levels.

use jiff::{Span, Timestamp, tz::TimeZone};
use serde_json::value::RawValue;

use crate::api::decode::{At, Faults, Object, every, instant, list, object, real, whole};
use crate::config::LimitsConfig;
use crate::model::{
    ArrivalPlan, ArrivalSegment, ForecastPlan, Levels, MAX_DEGREE, PlanFault, Thresholds, days_between,
};
use crate::report::readable;

/// Most dates a horizon is spread over before it is refused; one more than a plan takes, so that the plan says why.
const MOST_STEPS: i64 = 4_001;

/// Arrivals from the newest snapshot on; none when they were left out.
pub fn arrivals(body: &Object<'_>, latest: Option<Timestamp>, faults: &mut Faults) -> Option<ArrivalPlan> {
    let root = At::ROOT;
    let at = root.field("arrivals");
    let raw = body.get("arrivals")?;
    let given = object(raw, at, &["per_day", "growth_per_year", "segments"], faults)?;
    let segmented = given.get("segments");
    if segmented.is_some() && (given.get("per_day").is_some() || given.get("growth_per_year").is_some()) {
        faults.add(&at, "give either per_day (with growth_per_year) or segments, not both");
        return None;
    }
    let segments = match segmented {
        Some(raw) => segments(raw, at.field("segments"), latest, faults)?,
        None => vec![segment(&given, at, 0.0, faults)?],
    };
    let plan = ArrivalPlan::from_segments(&segments);
    for fault in plan.as_ref().err().into_iter().flatten() {
        let detail = readable(&fault.detail);
        match (segmented, fault.index) {
            (Some(_), Some(index)) => faults.add(&at.field("segments").item(index).field(fault.field), detail),
            _ => faults.add(&at.field(fault.field), detail),
        }
    }
    plan.ok()
}

fn segments(raw: &RawValue, at: At<'_>, latest: Option<Timestamp>, faults: &mut Faults) -> Option<Vec<ArrivalSegment>> {
    let mut segments = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        segments.extend(object(item, at, &["from", "per_day", "growth_per_year"], faults).and_then(|given| {
            let from = given.required("from", &at, faults).and_then(|raw| instant(raw, at.field("from"), faults));
            // Without a newest snapshot there is no day to count from; that is a fault of its own already.
            let from_day = from.zip(latest).map(|(from, latest)| days_between(latest, from));
            let segment = segment(&given, at, from_day.unwrap_or(0.0), faults);
            from_day.and(segment)
        }));
    })?;
    (segments.len() == length).then_some(segments)
}

fn segment(given: &Object<'_>, at: At<'_>, from_day: f64, faults: &mut Faults) -> Option<ArrivalSegment> {
    let per_day = given.required("per_day", &at, faults).and_then(|raw| real(raw, at.field("per_day"), faults));
    let growth_per_year = match given.get("growth_per_year") {
        Some(raw) => real(raw, at.field("growth_per_year"), faults),
        None => Some(0.0),
    };
    Some(ArrivalSegment { from_day, per_day: per_day?, growth_per_year: growth_per_year? })
}

/// Thresholds, dates and levels.
pub fn plan(
    body: &Object<'_>,
    latest: Option<Timestamp>,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<ForecastPlan> {
    let thresholds = thresholds(body, faults);
    let levels = levels(body, faults);
    let (dates, stepped) = match (body.get("dates"), body.get("horizon")) {
        (Some(raw), None) => (dates(raw, faults), false),
        (None, Some(raw)) => (horizon(raw, latest, faults), true),
        (given, _) => {
            let detail = "give either dates, or a horizon to spread dates over";
            let also = if given.is_some() { ", not both" } else { "" };
            faults.add(&At::ROOT, format!("{detail}{also}"));
            (None, false)
        }
    };
    // Dates are checked even when a threshold or level is wrong.
    let stand_in = Thresholds::new(&[1]).ok()?;
    let complete = thresholds.is_some() && levels.is_some();
    let (thresholds, levels) = (thresholds.unwrap_or(stand_in), levels.unwrap_or_default());
    let plan = ForecastPlan::new(latest?, thresholds, &dates?, levels);
    for fault in plan.as_ref().err().into_iter().flatten() {
        note(fault, stepped, faults);
    }
    let plan = plan.ok().filter(|_| complete)?;
    let cells = plan.thresholds().len() * plan.dates().len();
    if cells > limits.cells {
        let detail = format!(
            "{} thresholds at {} dates make {cells} answers; one forecast gives at most {}: split the request",
            plan.thresholds().len(),
            plan.dates().len(),
            limits.cells
        );
        faults.add(&At::ROOT.field(if stepped { "horizon" } else { "dates" }), detail);
        return None;
    }
    Some(plan)
}

fn note(fault: &PlanFault, stepped: bool, faults: &mut Faults) {
    let root = At::ROOT;
    let list = root.field(if stepped && fault.field == "dates" { "horizon" } else { fault.field });
    match fault.index {
        Some(index) if !stepped => faults.add(&list.item(index), readable(&fault.detail)),
        _ => faults.add(&list, readable(&fault.detail)),
    }
}

fn thresholds(body: &Object<'_>, faults: &mut Faults) -> Option<Thresholds> {
    let root = At::ROOT;
    let at = root.field("thresholds");
    let raw = body.required("thresholds", &root, faults)?;
    let mut values = Vec::new();
    let mut complete = true;
    list(raw, at, faults, |index, item, faults| {
        let value = whole(item, at.item(index), MAX_DEGREE, faults);
        complete &= value.is_some();
        // In place of what is no threshold stands a sound one, so that the others are checked and keep their index.
        values.push(value.unwrap_or(1));
    })?;
    let found = Thresholds::new(&values);
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, false, faults));
    found.ok().filter(|_| complete)
}

fn levels(body: &Object<'_>, faults: &mut Faults) -> Option<Levels> {
    let root = At::ROOT;
    let at = root.field("levels");
    let Some(raw) = body.get("levels") else { return Some(Levels::default()) };
    let mut values = Vec::new();
    let mut complete = true;
    list(raw, at, faults, |index, item, faults| {
        let value = real(item, at.item(index), faults);
        complete &= value.is_some();
        // As with thresholds.
        values.push(value.unwrap_or(0.5));
    })?;
    let found = Levels::new(&values);
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, false, faults));
    found.ok().filter(|_| complete)
}

fn dates(raw: &RawValue, faults: &mut Faults) -> Option<Vec<Timestamp>> {
    let root = At::ROOT;
    let at = root.field("dates");
    let mut dates = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| dates.extend(instant(item, at.item(index), faults)))?;
    (dates.len() == length).then_some(dates)
}

/// The dates `latest + every`, `latest + 2·every`, … up to and including `until`, by the calendar.
fn horizon(raw: &RawValue, latest: Option<Timestamp>, faults: &mut Faults) -> Option<Vec<Timestamp>> {
    let root = At::ROOT;
    let at = root.field("horizon");
    let given = object(raw, at, &["until", "every"], faults)?;
    let until = given.required("until", &at, faults).and_then(|raw| instant(raw, at.field("until"), faults));
    let step = given.required("every", &at, faults).and_then(|raw| every(raw, at.field("every"), faults));
    let (until, step, latest) = (until?, step?, latest?);
    let dates = steps(latest, until, step);
    if dates.is_empty() {
        faults.add(&at.field("until"), format!("{until} is before the first date, one step after the newest snapshot"));
        return None;
    }
    Some(dates)
}

/// Counted from the start each time: a month after 31 January is 28 February, two months after it 31 March.
fn steps(from: Timestamp, until: Timestamp, step: Span) -> Vec<Timestamp> {
    let from = from.to_zoned(TimeZone::UTC);
    (1..=MOST_STEPS)
        .map_while(|count| Some(from.checked_add(step.checked_mul(count).ok()?).ok()?.timestamp()))
        .take_while(|&date| date <= until)
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_follow_the_calendar_and_include_the_end() {
        let dates = steps(
            "2026-01-31T00:00:00Z".parse().unwrap(),
            "2026-04-30T00:00:00Z".parse().unwrap(),
            "P1M".parse().unwrap(),
        );
        let dates: Vec<String> = dates.iter().map(|date| date.to_string()[..10].to_owned()).collect();
        assert_eq!(dates, ["2026-02-28", "2026-03-31", "2026-04-30"]);
    }

    #[test]
    fn a_tiny_step_does_not_run_for_ever() {
        let dates = steps(
            "2026-01-01T00:00:00Z".parse().unwrap(),
            "2200-01-01T00:00:00Z".parse().unwrap(),
            "PT1S".parse().unwrap(),
        );
        assert_eq!(dates.len(), 4_001);
    }
}

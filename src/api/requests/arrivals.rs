//! Planned arrivals: a rate, segments or a table; seasons on top; how uncertain they are.

use jiff::Timestamp;
use serde_json::value::RawValue;

use crate::api::decode::{At, Faults, Object, fields, instant, list, object, real, segments_csv, text};
use crate::model::{
    ArrivalFault, ArrivalPlan, ArrivalSpread, Campaign, ForecastPlan, Limit, Seasons, StandingArrivals, StandingPlan,
    StandingSegment,
};
use crate::report::readable;

/// Fields of planned arrivals.
const FIELDS: [&str; 10] = [
    "per_day",
    "growth_per_year",
    "segments",
    "csv",
    "months",
    "weeks",
    "campaigns",
    "standard_deviation",
    "range",
    "relative_deviation",
];

/// What planned arrivals are wanted for: from the newest snapshot, where there is one, up to the last date that anything is asked of.
#[derive(Debug, Clone, Copy)]
pub(super) struct Stretch {
    latest: Option<Timestamp>,
    until: Option<Timestamp>,
}

impl Stretch {
    /// No snapshot yet: arrivals are read from their own start on.
    pub const UNKNOWN: Self = Self { latest: None, until: None };

    /// The stretch of a forecast with limits.
    pub fn of(latest: Option<Timestamp>, plan: Option<&ForecastPlan>, limits: &[Limit]) -> Self {
        let dates = plan.into_iter().flat_map(|plan| plan.dates()).copied();
        // Without dates there is a fault already; what can be told of the arrivals still is.
        Self { latest, until: dates.chain(limits.iter().map(Limit::by)).max().or(latest) }
    }
}

/// Arrivals over a stretch; those of the network's plan, or none, when they were left out.
pub(super) fn arrivals(
    body: &Object<'_>,
    stretch: Stretch,
    standing: Option<&StandingPlan>,
    faults: &mut Faults,
) -> Option<ArrivalPlan> {
    let root = At::ROOT;
    let at = root.field("arrivals");
    let Some(raw) = body.get("arrivals") else {
        let planned = standing?.arrivals.as_ref()?.at(stretch.latest?, stretch.until?);
        let in_words = |found: Vec<ArrivalFault>| {
            let details: Vec<String> = found.iter().take(3).map(ToString::to_string).collect();
            faults.add(&at, format!("forecast_plan: {}", details.join("; ")));
        };
        return planned.map_err(in_words).ok();
    };
    given_arrivals(raw, at, faults)?.plan(at, stretch.latest, stretch.until, faults)
}

/// Arrivals at any place of a body, over a stretch or from their own start on.
pub(super) fn arrivals_at(raw: &RawValue, at: At<'_>, stretch: Stretch, faults: &mut Faults) -> Option<ArrivalPlan> {
    let given = given_arrivals(raw, at, faults)?;
    let from = stretch.latest.or(given.arrivals.segments().first().and_then(|segment| segment.from));
    let from = from.unwrap_or(Timestamp::UNIX_EPOCH);
    given.plan(at, Some(from), stretch.until.or(Some(from)), faults)
}

/// Planned arrivals as they are given.
pub(super) struct GivenArrivals {
    /// What they are.
    pub arrivals: StandingArrivals,
    form: Form,
}

/// Where segments are given, and so where their faults are.
enum Form {
    Rate,
    Segments,
    /// The line of each.
    Table(Vec<u64>),
}

/// Reads planned arrivals, at any place of a body.
pub(super) fn given_arrivals(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<GivenArrivals> {
    let given = object(raw, at, &FIELDS, faults)?;
    let base = base(&given, at, faults);
    let seasons = seasons(&given, at, faults);
    let spread = spread(&given, at, faults);
    let (segments, form) = base?;
    let noted = |found: &[ArrivalFault], faults: &mut Faults| {
        found.iter().for_each(|fault| note(fault, &form, at, faults));
    };
    let arrivals = StandingArrivals::new(segments).map_err(|found| noted(&found, faults)).ok()?;
    let arrivals = arrivals.with_seasons(seasons?);
    let arrivals = match spread? {
        Some(spread) => arrivals.with_spread(spread).map_err(|fault| noted(&[fault], faults)).ok()?,
        None => arrivals,
    };
    Some(GivenArrivals { arrivals, form })
}

impl GivenArrivals {
    /// The plan from the newest snapshot on, seasons up to `until`; none without them, which is a fault of its own already.
    pub fn plan(
        &self,
        at: At<'_>,
        latest: Option<Timestamp>,
        until: Option<Timestamp>,
        faults: &mut Faults,
    ) -> Option<ArrivalPlan> {
        let plan = self.arrivals.at(latest?, until?);
        plan.map_err(|found| found.iter().for_each(|fault| note(fault, &self.form, at, faults))).ok()
    }
}

fn note(fault: &ArrivalFault, form: &Form, at: At<'_>, faults: &mut Faults) {
    let detail = readable(&fault.detail);
    let (list, in_segments) = (at.field(fault.list), fault.list == "segments");
    match (fault.index, form) {
        (None, Form::Table(_)) if fault.field == "segments" => faults.add(&at.field("csv"), detail),
        (None, _) => faults.add(&at.field(fault.field), detail),
        (Some(_), Form::Rate) if in_segments => faults.add(&at.field(fault.field), detail),
        (Some(index), Form::Table(lines)) if in_segments => {
            let line = lines.get(index).copied().unwrap_or(1);
            faults.add(&at.field("csv"), format!("line {line}: {}: {detail}", fault.field));
        }
        (Some(index), _) if fault.field.is_empty() => faults.add(&list.item(index), detail),
        (Some(index), _) => faults.add(&list.item(index).field(fault.field), detail),
    }
}

fn base(given: &Object<'_>, at: At<'_>, faults: &mut Faults) -> Option<(Vec<StandingSegment>, Form)> {
    let rated = given.get("per_day").or(given.get("growth_per_year"));
    match (rated, given.get("segments"), given.get("csv")) {
        (None, Some(raw), None) => Some((segments(raw, at.field("segments"), faults)?, Form::Segments)),
        (None, None, Some(raw)) => {
            let at = at.field("csv");
            let (segments, lines) = segments_csv(&text(raw, at, faults)?, at, faults)?;
            Some((segments, Form::Table(lines)))
        }
        (_, None, None) => Some((vec![segment(given, at, None, faults)?], Form::Rate)),
        _ => {
            faults.add(&at, "give either per_day (with growth_per_year), or segments, or csv, not both");
            None
        }
    }
}

fn segments(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<StandingSegment>> {
    let mut segments = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        segments.extend(object(item, at, &["from", "per_day", "growth_per_year"], faults).and_then(|given| {
            let from = given.required("from", &at, faults).and_then(|raw| instant(raw, at.field("from"), faults));
            let segment = segment(&given, at, from, faults);
            from.and(segment)
        }));
    })?;
    (segments.len() == length).then_some(segments)
}

fn segment(given: &Object<'_>, at: At<'_>, from: Option<Timestamp>, faults: &mut Faults) -> Option<StandingSegment> {
    let per_day = given.required("per_day", &at, faults).and_then(|raw| real(raw, at.field("per_day"), faults));
    let growth_per_year = match given.get("growth_per_year") {
        Some(raw) => real(raw, at.field("growth_per_year"), faults),
        None => Some(0.0),
    };
    Some(StandingSegment { from, per_day: per_day?, growth_per_year: growth_per_year? })
}

fn seasons(given: &Object<'_>, at: At<'_>, faults: &mut Faults) -> Option<Seasons> {
    let months = match given.get("months") {
        Some(raw) => months(raw, at.field("months"), faults).map(Some),
        None => Some(None),
    };
    let weeks = match given.get("weeks") {
        Some(raw) => weeks(raw, at.field("weeks"), faults),
        None => Some(Vec::new()),
    };
    let campaigns = match given.get("campaigns") {
        Some(raw) => campaigns(raw, at.field("campaigns"), faults),
        None => Some(Vec::new()),
    };
    let seasons = Seasons::new(months?, weeks?, campaigns?);
    // Seasons have their places whatever form the segments have.
    seasons.map_err(|found| found.iter().for_each(|fault| note(fault, &Form::Segments, at, faults))).ok()
}

fn months(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<[f64; 12]> {
    let factors = reals(raw, at, faults)?;
    let length = factors.len();
    let months = factors.try_into().ok();
    if months.is_none() {
        faults.add(&at, format!("months are twelve factors, January first, not {length}"));
    }
    months
}

fn weeks(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<(u8, f64)>> {
    let named = fields(raw, at, faults)?;
    let length = named.len();
    let mut weeks = Vec::new();
    for (name, raw) in named {
        let week = name.parse::<u8>().ok().filter(|week| (1..=53).contains(week) && !name.starts_with('+'));
        if week.is_none() {
            let shown: String = name.chars().take(40).collect();
            faults.add(&at.field(&name), format!("{shown:?} is no ISO week; they are named \"1\" to \"53\""));
        }
        let factor = real(raw, at.field(&name), faults);
        weeks.extend(week.zip(factor));
    }
    (weeks.len() == length).then_some(weeks)
}

fn campaigns(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<Campaign>> {
    let mut campaigns = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        campaigns.extend(object(item, at, &["from", "until", "factor"], faults).and_then(|given| {
            let mut date = |name: &'static str| {
                given.required(name, &at, faults).and_then(|raw| instant(raw, at.field(name), faults))
            };
            let (from, until) = (date("from"), date("until"));
            let factor = given.required("factor", &at, faults).and_then(|raw| real(raw, at.field("factor"), faults));
            Some(Campaign { from: from?, until: until?, factor: factor? })
        }));
    })?;
    (campaigns.len() == length).then_some(campaigns)
}

/// How uncertain the rates are; the inner none: not at all.
fn spread(given: &Object<'_>, at: At<'_>, faults: &mut Faults) -> Option<Option<ArrivalSpread>> {
    let number = |name: &'static str, raw: &RawValue, faults: &mut Faults| real(raw, at.field(name), faults);
    let [deviation, range, relative] =
        ["standard_deviation", "range", "relative_deviation"].map(|name| given.get(name));
    match (deviation, range, relative) {
        (None, None, None) => Some(None),
        (Some(raw), None, None) => {
            number("standard_deviation", raw, faults).map(|deviation| Some(ArrivalSpread::StandardDeviation(deviation)))
        }
        (None, None, Some(raw)) => {
            number("relative_deviation", raw, faults).map(|deviation| Some(ArrivalSpread::Relative(deviation)))
        }
        (None, Some(raw), None) => {
            let at = at.field("range");
            match reals(raw, at, faults)?[..] {
                [low, high] => Some(Some(ArrivalSpread::Range(low, high))),
                ref other => {
                    faults.add(&at, format!("a range is two numbers, [low, high], not {}", other.len()));
                    None
                }
            }
        }
        _ => {
            faults.add(&at, "give one of standard_deviation, range and relative_deviation, not several");
            None
        }
    }
}

fn reals(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<f64>> {
    let mut found = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| found.extend(real(item, at.item(index), faults)))?;
    (found.len() == length).then_some(found)
}

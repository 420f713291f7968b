//! What is asked besides the tails: limits, bands, watched nodes, the next hubs; what-ifs in the room below.

pub(super) mod scenarios;
pub(super) mod work;

use jiff::Timestamp;
use serde_json::value::RawValue;

use super::arrivals::Stretch;
use super::outlook;
use crate::api::decode::{At, Faults, Object, instant, list, object, real, text, whole};
use crate::config::LimitsConfig;
use crate::model::{
    Band, Bands, ForecastPlan, Levels, Limit, MAX_DEGREE, MAX_LIMITS, MAX_NEXT_HUBS, QuestionFault, Questions,
    Thresholds, Watch, WatchedClass, WatchedNode,
};
use crate::report::readable;
use crate::service::{DEFAULT_RISK, Label};

/// Fields of a limit but for its name.
pub const LIMIT_FIELDS: [&str; 4] = ["threshold", "max_nodes", "by", "risk"];

/// Everything that is asked besides the tails; `kept` limits stand where none are given, `plan` is what the tails are asked for.
pub fn read(
    body: &Object<'_>,
    latest: Option<Timestamp>,
    (plan, kept): (Option<&ForecastPlan>, Vec<Limit>),
    config: &LimitsConfig,
    faults: &mut Faults,
) -> Option<Questions> {
    let limits = asked(body, "limits", faults, |raw, at, faults| limits(raw, at, latest, faults));
    let bands = bands(body, faults);
    let watch = asked(body, "watch", faults, |raw, at, faults| watch(raw, at, faults).map(Some));
    let next_hubs = asked(body, "next_hubs", faults, next_hubs);
    let limits = if body.get("limits").is_some() { limits } else { Some(kept) };
    let stretch = Stretch::of(latest, plan, limits.as_deref().unwrap_or_default());
    let scenarios = asked(body, "scenarios", faults, |raw, at, faults| scenarios::read_list(raw, at, stretch, faults));
    let questions =
        Questions { limits: limits?, bands: bands?, watch: watch?, next_hubs: next_hubs?, scenarios: scenarios? };
    work::within(&questions, plan?, config, faults).then_some(questions)
}

/// A question that may be left out.
fn asked<T: Default>(
    body: &Object<'_>,
    field: &'static str,
    faults: &mut Faults,
    read: impl FnOnce(&RawValue, At<'_>, &mut Faults) -> Option<T>,
) -> Option<T> {
    let root = At::ROOT;
    body.get(field).map_or(Some(T::default()), |raw| read(raw, root.field(field), faults))
}

fn limits(raw: &RawValue, at: At<'_>, latest: Option<Timestamp>, faults: &mut Faults) -> Option<Vec<Limit>> {
    let mut limits = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        limits.extend(object(item, at, &["name", "threshold", "max_nodes", "by", "risk"], faults).and_then(|given| {
            let name = match given.get("name") {
                Some(raw) => named(raw, at.field("name"), faults).map(Some),
                None => Some(None),
            };
            let limit = limit(&given, at, name.clone().flatten(), faults);
            let limit = limit.filter(|limit| is_reached(limit.by(), latest, at.field("by"), faults));
            name.and(limit)
        }));
    })?;
    within_count(length, MAX_LIMITS, "limits", at, faults)?;
    (limits.len() == length).then_some(limits)
}

/// A limit whose date is not held against a snapshot yet.
pub fn limit(given: &Object<'_>, at: At<'_>, name: Option<String>, faults: &mut Faults) -> Option<Limit> {
    let mut count = |field: &'static str| {
        let raw = given.required(field, &at, faults)?;
        whole(raw, at.field(field), MAX_DEGREE, faults)
    };
    let (threshold, max_nodes) = (count("threshold"), count("max_nodes"));
    let by = given.required("by", &at, faults).and_then(|raw| instant(raw, at.field("by"), faults));
    let risk = match given.get("risk") {
        Some(raw) => real(raw, at.field("risk"), faults),
        None => Some(DEFAULT_RISK),
    };
    // What is missing is told already; the others are checked beside a sound stand-in.
    let stand_in = by.unwrap_or(Timestamp::UNIX_EPOCH);
    let found = Limit::new(name, threshold.unwrap_or(1), max_nodes.unwrap_or(0), stand_in, risk.unwrap_or(0.0));
    let found = noted(found, faults, |fault, faults| faults.add(&at.field(fault.field), readable(&fault.detail)));
    threshold.and(max_nodes).and(by).and(risk).and(found)
}

/// Whether a limit's date is one that a forecast from the newest snapshot reaches.
fn is_reached(by: Timestamp, latest: Option<Timestamp>, at: At<'_>, faults: &mut Faults) -> bool {
    // Without a newest snapshot there is a fault already.
    let (Some(latest), Ok(any)) = (latest, Thresholds::new(&[1])) else { return true };
    let found = ForecastPlan::new(latest, any, &[by], Levels::default());
    found.as_ref().err().into_iter().flatten().for_each(|fault| faults.add(&at, readable(&fault.detail)));
    found.is_ok()
}

fn bands(body: &Object<'_>, faults: &mut Faults) -> Option<Option<Bands>> {
    let root = At::ROOT;
    let unit = match body.get("cost_unit") {
        Some(raw) => named(raw, root.field("cost_unit"), faults).map(Some),
        None => Some(None),
    };
    let Some(raw) = body.get("bands") else {
        if body.get("cost_unit").is_some() {
            faults.add(&root.field("cost_unit"), "cost_unit names the unit of bands, and there are none; give bands");
            return None;
        }
        return Some(None);
    };
    let at = root.field("bands");
    let mut bands = Vec::new();
    let mut complete = true;
    list(raw, at, faults, |index, item, faults| {
        let band = band(item, at.item(index), faults);
        complete &= band.is_some();
        bands.extend(band);
    })?;
    // Bands left out would shift the places of the others.
    if !complete {
        return None;
    }
    let found = Bands::new(unit.clone().flatten(), &bands);
    let found = noted(found, faults, |fault, faults| match (fault.index, fault.field) {
        (None, _) => faults.add(&at, readable(&fault.detail)),
        (Some(index), "") => faults.add(&at.item(index), readable(&fault.detail)),
        (Some(index), field) => faults.add(&at.item(index).field(field), readable(&fault.detail)),
    });
    unit.and(found).map(Some)
}

fn band(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Band> {
    let given = object(raw, at, &["from", "to", "per_node", "per_link"], faults)?;
    let from = given.required("from", &at, faults).and_then(|raw| whole(raw, at.field("from"), MAX_DEGREE, faults));
    let to = match given.get("to") {
        Some(raw) => whole(raw, at.field("to"), MAX_DEGREE, faults).map(Some),
        None => Some(None),
    };
    let mut cost = |field: &'static str| match given.get(field) {
        Some(raw) => real(raw, at.field(field), faults),
        None => Some(0.0),
    };
    let (per_node, per_link) = (cost("per_node"), cost("per_link"));
    if given.get("per_node").is_none() && given.get("per_link").is_none() {
        faults.add(&at, "the band has no cost; give per_node, per_link or both");
        return None;
    }
    Some(Band { from: from?, to: to?, per_node: per_node?, per_link: per_link? })
}

fn watch(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Watch> {
    let given = object(raw, at, &["nodes", "classes", "thresholds"], faults)?;
    let nodes = each(given.get("nodes"), at.field("nodes"), faults, |item, at, faults| {
        let given = object(item, at, &["name", "degree"], faults)?;
        let name = given.required("name", &at, faults).and_then(|raw| named(raw, at.field("name"), faults));
        let degree = given.required("degree", &at, faults);
        let degree = degree.and_then(|raw| whole(raw, at.field("degree"), MAX_DEGREE, faults));
        Some(WatchedNode { name: name?, degree: degree? })
    });
    let classes = each(given.get("classes"), at.field("classes"), faults, |item, at, faults| {
        let given = object(item, at, &["from", "to"], faults)?;
        let mut end = |field: &'static str| {
            let raw = given.required(field, &at, faults)?;
            whole(raw, at.field(field), MAX_DEGREE, faults)
        };
        let (from, to) = (end("from"), end("to"));
        Some(WatchedClass { from: from?, to: to? })
    });
    let thresholds = match given.get("thresholds") {
        Some(raw) => outlook::thresholds_of(raw, at, faults).map(Some),
        None => Some(None),
    };
    let found = Watch::new(nodes?, classes?, thresholds?);
    noted(found, faults, |fault, faults| match fault.index {
        Some(index) => faults.add(&at.field(fault.field).item(index), readable(&fault.detail)),
        None => faults.add(&at, readable(&fault.detail)),
    })
}

/// A list that may be left out, each of its items read; none when one of them is at fault.
fn each<T>(
    raw: Option<&RawValue>,
    at: At<'_>,
    faults: &mut Faults,
    mut read: impl FnMut(&RawValue, At<'_>, &mut Faults) -> Option<T>,
) -> Option<Vec<T>> {
    let Some(raw) = raw else { return Some(Vec::new()) };
    let mut items = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| items.extend(read(item, at.item(index), faults)))?;
    (items.len() == length).then_some(items)
}

fn next_hubs(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<usize> {
    let ranks = whole(raw, at, MAX_NEXT_HUBS as u64, faults)?;
    if ranks == 0 {
        faults.add(&at, format!("next_hubs is how many of the largest nodes to tell of, from 1 to {MAX_NEXT_HUBS}"));
        return None;
    }
    usize::try_from(ranks).ok()
}

/// A name or unit in the caller's words: a label that is not empty.
fn named(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<String> {
    match Label::new(text(raw, at, faults)?) {
        Ok(label) if label.as_str().trim().is_empty() => {
            faults.add(&at, "the text is empty; name it, or leave the field out where it may be");
            None
        }
        Ok(label) => Some(label.as_str().to_owned()),
        Err(fault) => {
            faults.add(&at, fault.to_string());
            None
        }
    }
}

fn within_count(length: usize, most: usize, what: &str, at: At<'_>, faults: &mut Faults) -> Option<()> {
    if length > most {
        faults.add(&at, format!("{length} {what} are more than the {most} one request asks about; split the request"));
        return None;
    }
    Some(())
}

/// What was found, or nothing with its faults noted.
fn noted<T>(
    found: Result<T, Vec<QuestionFault>>,
    faults: &mut Faults,
    note: impl Fn(&QuestionFault, &mut Faults),
) -> Option<T> {
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, faults));
    found.ok()
}

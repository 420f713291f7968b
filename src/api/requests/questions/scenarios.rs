//! What-ifs: what of the forces would be other than it is.

use serde_json::value::RawValue;

use super::{named, noted, within_count};
use crate::api::decode::{At, Faults, Object, list, object, real, text, whole};
use crate::api::requests::arrivals::{Stretch, arrivals_at};
use crate::model::{AttachmentMix, Change, DegreeCap, MAX_DEGREE, MAX_SCENARIOS, RefusedLinks, Shift};
use crate::report::readable;

/// Fields of a what-if but for its name.
pub const CHANGE_FIELDS: [&str; 7] = [
    "arrivals",
    "arrivals_factor",
    "links_per_arrival",
    "links_factor",
    "preferential_share",
    "departures_per_node_day",
    "degree_cap",
];

/// What-ifs, each with a name of its own.
pub fn read_list(raw: &RawValue, at: At<'_>, stretch: Stretch, faults: &mut Faults) -> Option<Vec<Change>> {
    let mut changes: Vec<Change> = Vec::new();
    let mut names: Vec<String> = Vec::new();
    let known: Vec<&str> = std::iter::once("name").chain(CHANGE_FIELDS).collect();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        changes.extend(object(item, at, &known, faults).and_then(|given| {
            let name = given.required("name", &at, faults).and_then(|raw| named(raw, at.field("name"), faults));
            let repeated = name.as_ref().is_some_and(|name| names.contains(name));
            if repeated {
                faults.add(&at.field("name"), "another scenario has this name; name each one differently");
            }
            names.extend(name.clone());
            let change = change(&given, at, name.clone().unwrap_or_default(), stretch, faults);
            name.filter(|_| !repeated).and(change)
        }));
    })?;
    within_count(length, MAX_SCENARIOS, "scenarios", at, faults)?;
    (changes.len() == length).then_some(changes)
}

/// One what-if; its arrivals count from the newest snapshot, or from where they start where there is none yet.
pub fn change(given: &Object<'_>, at: At<'_>, name: String, stretch: Stretch, faults: &mut Faults) -> Option<Change> {
    let before = faults.count();
    let arrivals = shift(given, ["arrivals", "arrivals_factor"], at, faults, |raw, at, faults| {
        arrivals_at(raw, at, stretch, faults)
    });
    let links_per_arrival = shift(given, ["links_per_arrival", "links_factor"], at, faults, real);
    let share = given.get("preferential_share").and_then(|raw| real(raw, at.field("preferential_share"), faults));
    let mix = share.and_then(AttachmentMix::new);
    if let Some(share) = share.filter(|_| mix.is_none()) {
        faults.add(&at.field("preferential_share"), format!("a share lies between 0 and 1, not at {share}"));
    }
    let departures = given.get("departures_per_node_day");
    let departures_per_node_day = departures.and_then(|raw| real(raw, at.field("departures_per_node_day"), faults));
    let degree_cap = given.get("degree_cap").and_then(|raw| degree_cap(raw, at.field("degree_cap"), faults));
    let found = Change { name, arrivals, links_per_arrival, mix, departures_per_node_day, degree_cap };
    // A field that could not be read is no change of nothing.
    if faults.count() > before {
        return None;
    }
    noted(found.checked(), faults, |fault, faults| match fault.field {
        "" => faults.add(&at, fault.detail.as_str()),
        field => faults.add(&at.field(field), readable(&fault.detail)),
    })
}

/// A rate in place of another, or a factor on it; not both.
fn shift<T>(
    given: &Object<'_>,
    [to, factor]: [&'static str; 2],
    at: At<'_>,
    faults: &mut Faults,
    read: impl FnOnce(&RawValue, At<'_>, &mut Faults) -> Option<T>,
) -> Option<Shift<T>> {
    match (given.get(to), given.get(factor)) {
        (Some(_), Some(_)) => {
            faults.add(&at, format!("give either {to} or {factor}, not both"));
            None
        }
        (Some(raw), None) => read(raw, at.field(to), faults).map(Shift::To),
        (None, Some(raw)) => real(raw, at.field(factor), faults).map(Shift::Factor),
        (None, None) => None,
    }
}

fn degree_cap(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<DegreeCap> {
    let given = object(raw, at, &["links", "refused"], faults)?;
    let links = given.required("links", &at, faults).and_then(|raw| whole(raw, at.field("links"), MAX_DEGREE, faults));
    let refused = given.required("refused", &at, faults).and_then(|raw| text(raw, at.field("refused"), faults));
    let refused = refused.and_then(|name| match name.as_str() {
        "spread" => Some(RefusedLinks::Spread),
        "lost" => Some(RefusedLinks::Lost),
        _ => {
            let detail = "refused links are \"spread\" (they pick again among nodes below the cap) or \"lost\" (they \
                          are not made)";
            faults.add(&at.field("refused"), detail);
            None
        }
    });
    let cap = DegreeCap::new(links?, refused?);
    cap.map_err(|fault| faults.add(&at.field(fault.field), readable(&fault.detail))).ok()
}

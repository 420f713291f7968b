//! What is known of the network: degree kind, snapshots, entry degrees, transitions, link events.

use jiff::Timestamp;
use serde_json::value::RawValue;

use crate::api::decode::{
    At, Faults, Object, degree_counts, instant, link_events, list, moves, object, real, text, whole,
};
use crate::config::LimitsConfig;
use crate::model::{DegreeKind, EntryDegrees, Evidence, EvidenceFault, MAX_DEGREE, Snapshot, Transitions};
use crate::report::readable;

/// The evidence as far as it could be read.
pub struct Reading {
    /// All of it, when it has no fault.
    pub whole: Option<Evidence>,
    /// Date of the newest snapshot, when that much is known: dates are checked against it even when counts are wrong.
    pub latest: Option<Timestamp>,
}

/// Reads the evidence.
pub fn read(body: &Object<'_>, limits: &LimitsConfig, faults: &mut Faults) -> Reading {
    let kind = degree_kind(body, faults);
    let entry = match body.get("entry_degrees") {
        Some(raw) => entry_degrees(raw, faults).map(Some),
        None => Some(None),
    };
    let (snapshots, latest) = snapshots(body, limits, faults);
    let transitions = match body.get("transitions") {
        Some(raw) => transitions(raw, limits, faults),
        None => Some(Vec::new()),
    };
    let root = At::ROOT;
    let events = match body.get("link_events") {
        Some(raw) => link_events(raw, root.field("link_events"), limits.link_events, faults).map(Some),
        None => Some(None),
    };
    let whole = (|| {
        let evidence = noted(Evidence::new(kind?, snapshots?, entry?), root.field("snapshots"), Some("as_of"), faults)?;
        let evidence = noted(evidence.with_transitions(transitions?), root.field("transitions"), None, faults)?;
        Some(match events? {
            Some(events) => evidence.with_link_events(events),
            None => evidence,
        })
    })();
    Reading { whole, latest }
}

/// What was found, or its faults, each in its item of the list at `at`, in `field` when it has one.
fn noted<T>(
    found: Result<T, Vec<EvidenceFault>>,
    at: At<'_>,
    field: Option<&'static str>,
    faults: &mut Faults,
) -> Option<T> {
    for fault in found.as_ref().err().into_iter().flatten() {
        let detail = fault.detail.as_str();
        match (fault.index, field) {
            (Some(index), Some(field)) => faults.add(&at.item(index).field(field), detail),
            (Some(index), None) => faults.add(&at.item(index), detail),
            (None, _) => faults.add(&at, detail),
        }
    }
    found.ok()
}

/// Reads what a degree counts.
pub fn degree_kind(body: &Object<'_>, faults: &mut Faults) -> Option<DegreeKind> {
    let root = At::ROOT;
    let at = root.field("degree_kind");
    match text(body.required("degree_kind", &root, faults)?, at, faults)?.as_str() {
        "received" => Some(DegreeKind::Received),
        "total" => Some(DegreeKind::Total),
        _ => {
            faults.add(&at, "a degree counts either links \"received\" or links in \"total\"");
            None
        }
    }
}

fn snapshots(
    body: &Object<'_>,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> (Option<Vec<Snapshot>>, Option<Timestamp>) {
    let root = At::ROOT;
    let at = root.field("snapshots");
    let Some(raw) = body.required("snapshots", &root, faults) else { return (None, None) };
    let (mut snapshots, mut latest) = (Vec::new(), None);
    let length = list(raw, at, faults, |index, item, faults| {
        let (snapshot, as_of) = snapshot(item, at.item(index), limits, faults);
        snapshots.extend(snapshot);
        latest = as_of.max(latest);
    });
    let complete = length == Some(snapshots.len());
    (complete.then_some(snapshots), latest)
}

fn snapshot(
    raw: &RawValue,
    at: At<'_>,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> (Option<Snapshot>, Option<Timestamp>) {
    let Some(body) = object(raw, at, &["as_of", "degree_counts"], faults) else { return (None, None) };
    let as_of = body.required("as_of", &at, faults).and_then(|raw| instant(raw, at.field("as_of"), faults));
    let counts = body
        .required("degree_counts", &at, faults)
        .and_then(|raw| degree_counts(raw, at.field("degree_counts"), limits.degree_counts, faults));
    (as_of.zip(counts).map(|(as_of, counts)| Snapshot { as_of, counts }), as_of)
}

fn transitions(raw: &RawValue, limits: &LimitsConfig, faults: &mut Faults) -> Option<Vec<Transitions>> {
    /// One more than there can be periods between snapshots.
    const MOST_TABLES: usize = 1_000;
    let root = At::ROOT;
    let at = root.field("transitions");
    let mut tables = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        if index < MOST_TABLES {
            tables.extend(table(item, at.item(index), limits, faults));
        }
    })?;
    if length > MOST_TABLES {
        faults.add(&at, format!("{length} tables are more than the {MOST_TABLES} one request takes"));
    }
    (tables.len() == length).then_some(tables)
}

fn table(raw: &RawValue, at: At<'_>, limits: &LimitsConfig, faults: &mut Faults) -> Option<Transitions> {
    let body = object(raw, at, &["from", "to", "counts"], faults)?;
    let [from, to] = ["from", "to"]
        .map(|name| body.required(name, &at, faults).and_then(|raw| instant(raw, at.field(name), faults)));
    let counts = at.field("counts");
    let rows = body.required("counts", &at, faults).and_then(|raw| moves(raw, counts, limits.transitions, faults));
    let found = Transitions::new(from?, to?, &rows?);
    for fault in found.as_ref().err().into_iter().flatten() {
        match fault.index {
            Some(index) => faults.add(&counts.item(index), fault.detail.as_str()),
            None => faults.add(&at, fault.detail.as_str()),
        }
    }
    found.ok()
}

/// Reads the degrees that newcomers arrive with.
pub fn entry_degrees(raw: &RawValue, faults: &mut Faults) -> Option<EntryDegrees> {
    /// Entry degrees are few; the check for repeats is quadratic.
    const MOST_ENTRY_DEGREES: usize = 10_000;
    let root = At::ROOT;
    let at = root.field("entry_degrees");
    let mut pairs = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        if index < MOST_ENTRY_DEGREES {
            pairs.extend(entry_pair(item, at.item(index), faults));
        }
    })?;
    if length > MOST_ENTRY_DEGREES {
        faults.add(&at, format!("{length} entry degrees are more than the {MOST_ENTRY_DEGREES} that are taken"));
    }
    if length == 0 {
        let detail = "entry_degrees is empty; write at least one [degree, share] pair, or leave the field out";
        faults.add(&at, detail);
        return None;
    }
    if pairs.len() != length {
        return None;
    }
    let found = EntryDegrees::from_shares(&pairs);
    for fault in found.as_ref().err().into_iter().flatten() {
        match fault.index {
            Some(index) => faults.add(&at.item(index), readable(&fault.detail)),
            None => faults.add(&at, entry_sum_advice(&pairs, &fault.detail)),
        }
    }
    found.ok()
}

/// A fault of all the shares together, with what to do when they were only rounded.
fn entry_sum_advice(pairs: &[(u64, f64)], detail: &str) -> String {
    /// Shares this near to one altogether are meant to be one.
    const ROUNDED: f64 = 1e-3;
    let sum: f64 = pairs.iter().map(|&(_, share)| share).sum();
    if (sum - 1.0).abs() <= ROUNDED {
        return format!("{detail}; write the shares with more digits, or as counts divided by their sum");
    }
    readable(detail)
}

fn entry_pair(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<(u64, f64)> {
    let (mut degree, mut share) = (None, None);
    let length = list(raw, at, faults, |index, item, faults| match index {
        0 => degree = whole(item, at.item(0), MAX_DEGREE, faults),
        1 => share = real(item, at.item(1), faults),
        _ => {}
    })?;
    if length != 2 {
        faults.add(&at, format!("a [degree, share] pair has 2 numbers, not {length}"));
        return None;
    }
    degree.zip(share)
}

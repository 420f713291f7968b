//! What is known of the network: degree kind, snapshots, entry degrees.

use jiff::Timestamp;
use serde_json::value::RawValue;

use crate::api::decode::{At, Faults, Object, degree_counts, instant, list, object, real, text, whole};
use crate::config::LimitsConfig;
use crate::model::{DegreeKind, EntryDegrees, Evidence, MAX_DEGREE, Snapshot};
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
    let whole = (|| {
        let root = At::ROOT;
        let at = root.field("snapshots");
        let evidence = Evidence::new(kind?, snapshots?, entry?);
        for fault in evidence.as_ref().err().into_iter().flatten() {
            let detail = fault.detail.as_str();
            match fault.index {
                Some(index) => faults.add(&at.item(index).field("as_of"), detail),
                None => faults.add(&at, detail),
            }
        }
        evidence.ok()
    })();
    Reading { whole, latest }
}

fn degree_kind(body: &Object<'_>, faults: &mut Faults) -> Option<DegreeKind> {
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

fn entry_degrees(raw: &RawValue, faults: &mut Faults) -> Option<EntryDegrees> {
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

//! Bodies of requests about tracked networks.

use jiff::Timestamp;
use serde_json::value::RawValue;

use super::arrivals::Stretch;
use super::evidence::{degree_kind, entry_degrees};
use super::{FIT_FIELDS, FORECAST_FIELDS, arrivals, fit_request, label, outlook, questions};
use crate::api::decode::{
    At, Faults, Object, degree_counts, degree_counts_csv, link_events, moves, moves_csv, object, text,
};
use crate::config::LimitsConfig;
use crate::model::{Evidence, Limit, LinkEvents, Snapshot, StandingPlan, Transitions, TransitionsFault};
use crate::service::{Description, FitInputs, ForecastInputs, NetworkSettings, OriginRequest};

/// Fields of a network's settings.
pub const NETWORK_FIELDS: [&str; 4] = ["degree_kind", "description", "entry_degrees", "forecast_plan"];

/// Fields of an inline request that say what is known of the network: a run of a tracked one takes that from what is
/// stored.
pub const EVIDENCE_FIELDS: [&str; 5] = ["degree_kind", "snapshots", "transitions", "link_events", "entry_degrees"];

/// Reads a network's settings.
pub fn read_network(raw: &RawValue, limits: &LimitsConfig, faults: &mut Faults) -> Option<NetworkSettings> {
    let root = At::ROOT;
    let body = object(raw, root, &NETWORK_FIELDS, faults)?;
    let degree_kind = degree_kind(&body, faults);
    let description = body.get("description").and_then(|raw| text(raw, root.field("description"), faults));
    let description = description.map(Description::new).transpose();
    let description = description.map_err(|fault| faults.add(&root.field("description"), fault.to_string())).ok();
    let entry_degrees = match body.get("entry_degrees") {
        Some(raw) => entry_degrees(raw, faults).map(Some),
        None => Some(None),
    };
    let forecast_plan = match body.get("forecast_plan") {
        Some(raw) => outlook::standing_plan(raw, root.field("forecast_plan"), limits, faults).map(Some),
        None => Some(None),
    };
    Some(NetworkSettings {
        degree_kind: degree_kind?,
        description: description?,
        entry_degrees: entry_degrees?,
        forecast_plan: forecast_plan?,
    })
}

/// Reads the degree counts of a snapshot.
pub fn read_snapshot(raw: &RawValue, as_of: Timestamp, limits: &LimitsConfig, faults: &mut Faults) -> Option<Snapshot> {
    let root = At::ROOT;
    let body = object(raw, root, &["degree_counts"], faults)?;
    let raw = body.required("degree_counts", &root, faults)?;
    let counts = degree_counts(raw, root.field("degree_counts"), limits.degree_counts, faults)?;
    Some(Snapshot { as_of, counts })
}

/// Reads the degree counts of a snapshot from CSV.
pub fn read_snapshot_csv(
    bytes: &[u8],
    as_of: Timestamp,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<Snapshot> {
    degree_counts_csv(bytes, limits.degree_counts, faults).map(|counts| Snapshot { as_of, counts })
}

/// Reads the rows of a table of transitions.
pub fn read_transitions(
    raw: &RawValue,
    (from, to): (Timestamp, Timestamp),
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<Transitions> {
    let root = At::ROOT;
    let at = root.field("counts");
    let body = object(raw, root, &["counts"], faults)?;
    let rows = moves(body.required("counts", &root, faults)?, at, limits.transitions, faults)?;
    let found = Transitions::new(from, to, &rows);
    noted(found, faults, |fault, faults| match fault.index {
        Some(index) => faults.add(&at.item(index), fault.detail.as_str()),
        None => faults.add(&at, fault.detail.as_str()),
    })
}

/// Reads the rows of a table of transitions from CSV.
pub fn read_transitions_csv(
    bytes: &[u8],
    (from, to): (Timestamp, Timestamp),
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<Transitions> {
    let (rows, lines) = moves_csv(bytes, limits.transitions, faults)?;
    noted(Transitions::new(from, to, &rows), faults, |fault, faults| {
        let line = fault.index.and_then(|index| lines.get(index)).copied().unwrap_or(1);
        faults.add_line(line, fault.detail.as_str());
    })
}

fn noted(
    found: Result<Transitions, Vec<TransitionsFault>>,
    faults: &mut Faults,
    note: impl Fn(&TransitionsFault, &mut Faults),
) -> Option<Transitions> {
    found.as_ref().err().into_iter().flatten().for_each(|fault| note(fault, faults));
    found.ok()
}

/// Reads attachment statistics.
pub fn read_link_events(raw: &RawValue, limits: &LimitsConfig, faults: &mut Faults) -> Option<LinkEvents> {
    link_events(raw, At::ROOT, limits.link_events, faults)
}

/// Reads what is asked of a fit to a tracked network.
pub fn read_network_fit(raw: &RawValue, evidence: Evidence, faults: &mut Faults) -> Option<FitInputs> {
    let body = object(raw, At::ROOT, &FIT_FIELDS, faults)?;
    refuse_evidence(&body, faults);
    let fit = fit_request(&body, faults);
    let label = label(&body, faults);
    Some(FitInputs { label, evidence, fit: fit? })
}

/// Reads what is asked of a forecast of a tracked network; what is left out comes from its plan, if it has one, and the limits
/// from those kept with it.
pub fn read_network_forecast(
    raw: &RawValue,
    evidence: Evidence,
    (standing, kept): (Option<&StandingPlan>, Vec<Limit>),
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<ForecastInputs> {
    let body = object(raw, At::ROOT, &FORECAST_FIELDS, faults)?;
    refuse_evidence(&body, faults);
    let latest = Some(evidence.latest().as_of);
    let fit = fit_request(&body, faults);
    let label = label(&body, faults);
    let plan = outlook::plan(&body, latest, standing, limits, faults);
    let questions = questions::read(&body, latest, (plan.as_ref(), kept), limits, faults);
    let stretch = Stretch::of(latest, plan.as_ref(), questions.as_ref().map_or(&[], |asked| &asked.limits));
    let arrivals = arrivals::arrivals(&body, stretch, standing, faults);
    let request = OriginRequest { evidence, fit: fit?, arrivals, plan: plan?, questions: questions? };
    Some(ForecastInputs { label, request })
}

fn refuse_evidence(body: &Object<'_>, faults: &mut Faults) {
    for name in EVIDENCE_FIELDS.into_iter().filter(|name| body.get(name).is_some()) {
        let detail =
            format!("{name} is stored with the network, not given with a run; PUT it there, and leave it out here");
        faults.add(&At::ROOT.field(name), detail);
    }
}

//! Reading request bodies into validated inputs.

mod evidence;
mod network;
mod network_schema;
mod outlook;
mod schema;

use serde_json::value::RawValue;

pub use network::{
    EVIDENCE_FIELDS, NETWORK_FIELDS, read_link_events, read_network, read_network_fit, read_network_forecast,
    read_snapshot, read_snapshot_csv, read_transitions, read_transitions_csv,
};
pub use network_schema::{DegreeCountsBody, NetworkBody, NetworkFitBody, NetworkForecastBody, TransitionCountsBody};
pub use schema::{
    ArrivalsBody, DegreeKindName, FitRequestBody, FixedBody, ForecastRequestBody, HorizonBody, LinkEventsBody,
    ModelName, SegmentBody, SnapshotBody, TransitionsBody, WindowBody, degree_pairs, move_rows,
};

use super::decode::{At, Faults, Object, object, real, text, whole};
use crate::config::LimitsConfig;
use crate::model::{ArrivalPlan, AttachmentMix, DegreeKind, EntryDegrees, GrowthParameters, ParameterFault};
use crate::report::readable;
use crate::service::{FitInputs, FitRequest, ForecastInputs, Label, MAX_SEED, Model, ModelChoice, OriginRequest};

/// Fields of a fit's body.
pub const FIT_FIELDS: [&str; 13] = [
    "degree_kind",
    "snapshots",
    "transitions",
    "link_events",
    "entry_degrees",
    "links_per_arrival",
    "links_per_node_day",
    "departures_per_node_day",
    "link_losses_per_link_day",
    "model",
    "fixed",
    "seed",
    "label",
];

/// Fields of a forecast's body.
pub const FORECAST_FIELDS: [&str; 18] = [
    "degree_kind",
    "snapshots",
    "transitions",
    "link_events",
    "entry_degrees",
    "links_per_arrival",
    "model",
    "fixed",
    "seed",
    "label",
    "arrivals",
    "links_per_node_day",
    "departures_per_node_day",
    "link_losses_per_link_day",
    "thresholds",
    "dates",
    "horizon",
    "levels",
];

/// Seed when none is given.
const DEFAULT_SEED: u64 = 1;

/// Reads the body of a fit.
pub fn read_fit(raw: &RawValue, limits: &LimitsConfig, faults: &mut Faults) -> Option<FitInputs> {
    let body = object(raw, At::ROOT, &FIT_FIELDS, faults)?;
    let evidence = evidence::read(&body, limits, faults);
    let fit = fit_request(&body, faults);
    let label = label(&body, faults);
    Some(FitInputs { label, evidence: evidence.whole?, fit: fit? })
}

/// Reads the body of a forecast.
pub fn read_forecast(raw: &RawValue, limits: &LimitsConfig, faults: &mut Faults) -> Option<ForecastInputs> {
    let body = object(raw, At::ROOT, &FORECAST_FIELDS, faults)?;
    let evidence = evidence::read(&body, limits, faults);
    let fit = fit_request(&body, faults);
    let label = label(&body, faults);
    let arrivals = outlook::arrivals(&body, evidence.latest, faults);
    let plan = outlook::plan(&body, evidence.latest, limits, faults);
    let request = OriginRequest { evidence: evidence.whole?, fit: fit?, arrivals, plan: plan? };
    Some(ForecastInputs { label, request })
}

fn fit_request(body: &Object<'_>, faults: &mut Faults) -> Option<FitRequest> {
    let at = At::ROOT;
    let choice = match body.get("model").map(|raw| text(raw, at.field("model"), faults)) {
        None => Some(ModelChoice::Auto),
        Some(name) => name.and_then(|name| model_choice(&name, faults)),
    };
    let fixed_mix = body.get("fixed").and_then(|raw| fixed_mix(raw, faults));
    if let (Some(_), Some(ModelChoice::Only(Model::Uniform | Model::Preferential))) = (fixed_mix, choice) {
        let detail = "a given mix goes with the models auto and mix; the model named here says what the mix is already";
        faults.add(&at.field("fixed"), detail);
    }
    let seed = match body.get("seed") {
        Some(raw) => whole(raw, at.field("seed"), MAX_SEED, faults),
        None => Some(DEFAULT_SEED),
    };
    let links_per_arrival = rate(body, "links_per_arrival", faults);
    let [links_per_node_day, departures_per_node_day, link_losses_per_link_day] =
        ["links_per_node_day", "departures_per_node_day", "link_losses_per_link_day"]
            .map(|name| rate(body, name, faults).unwrap_or(0.0));
    Some(FitRequest {
        choice: choice?,
        fixed_mix,
        links_per_arrival,
        links_per_node_day,
        departures_per_node_day,
        link_losses_per_link_day,
        seed: seed?,
    })
}

fn model_choice(name: &str, faults: &mut Faults) -> Option<ModelChoice> {
    match name {
        "auto" => Some(ModelChoice::Auto),
        "uniform" => Some(ModelChoice::Only(Model::Uniform)),
        "preferential" => Some(ModelChoice::Only(Model::Preferential)),
        "mix" => Some(ModelChoice::Only(Model::Mix)),
        _ => {
            faults.add(&At::ROOT.field("model"), "the models are auto, uniform, preferential and mix");
            None
        }
    }
}

fn fixed_mix(raw: &RawValue, faults: &mut Faults) -> Option<AttachmentMix> {
    let root = At::ROOT;
    let at = root.field("fixed");
    let body = object(raw, at, &["preferential_share"], faults)?;
    let share_at = at.field("preferential_share");
    let share = real(body.required("preferential_share", &at, faults)?, share_at, faults)?;
    let mix = AttachmentMix::new(share);
    if mix.is_none() {
        faults.add(&share_at, readable(&format!("a share lies between 0 and 1, not at {share}")));
    }
    mix
}

fn label(body: &Object<'_>, faults: &mut Faults) -> Option<Label> {
    let root = At::ROOT;
    let at = root.field("label");
    let label = Label::new(text(body.get("label")?, at, faults)?);
    label.map_err(|fault| faults.add(&at, fault.to_string())).ok()
}

/// A rate that the model accepts.
fn rate(body: &Object<'_>, name: &'static str, faults: &mut Faults) -> Option<f64> {
    let root = At::ROOT;
    let at = root.field(name);
    let value = real(body.get(name)?, at, faults)?;
    // The model knows the range of a rate; every rate has the same.
    let (arrivals, entry) = (ArrivalPlan::constant(0.0).ok()?, EntryDegrees::single(0));
    match GrowthParameters::new(DegreeKind::Received, AttachmentMix::UNIFORM, arrivals, entry, value) {
        Ok(_) => Some(value),
        Err(fault) => {
            faults.add(&at, readable(&ParameterFault { field: name, ..fault }.to_string()));
            None
        }
    }
}

//! Reading request bodies into validated inputs.

mod arrivals;
mod backtest;
mod comparison;
mod evidence;
mod network;
mod network_schema;
mod notice;
mod outlook;
mod questions;
mod questions_schema;
mod schema;
mod source;

use serde_json::value::RawValue;

pub use backtest::{BacktestBody, read_backtest};
pub use comparison::{CHANGE_FIELDS, ComparisonQuery, LIMIT_FIELDS, read_kept_change, read_kept_limit};
pub use network::{
    EVIDENCE_FIELDS, NETWORK_FIELDS, read_link_events, read_network, read_network_fit, read_network_forecast,
    read_snapshot, read_snapshot_csv, read_transitions, read_transitions_csv,
};
pub use network_schema::{
    DegreeCountsBody, ForecastPlanBody, NetworkBody, NetworkFitBody, NetworkForecastBody, TransitionCountsBody,
};
pub use notice::{NOTICE_FIELDS, NoticeBody, read_notice};
pub use questions_schema::{ChangeBody, KeptLimitBody};
pub use schema::{
    ArrivalsBody, CampaignBody, DegreeKindName, FitRequestBody, FixedBody, ForecastRequestBody, HorizonBody,
    LinkEventsBody, ModelName, SegmentBody, SnapshotBody, TransitionsBody, WindowBody, degree_pairs, move_rows,
};
pub use source::{SourceBody, read_source};

use arrivals::Stretch;

use super::decode::{At, Faults, Object, object, real, text, whole};
use crate::config::LimitsConfig;
use crate::model::{ArrivalPlan, AttachmentMix, DegreeKind, EntryDegrees, GrowthParameters, ParameterFault};
use crate::report::readable;
use crate::service::{
    DEFAULT_SEED, FitInputs, FitRequest, Fixed, ForecastInputs, Label, MAX_SEED, Model, ModelChoice, OriginRequest,
    Rung,
};

/// Fields of a fit's body.
pub const FIT_FIELDS: [&str; 14] = [
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
    "evidence",
    "fixed",
    "seed",
    "label",
];

/// Fields of a forecast's body.
pub const FORECAST_FIELDS: [&str; 25] = [
    "degree_kind",
    "snapshots",
    "transitions",
    "link_events",
    "entry_degrees",
    "links_per_arrival",
    "model",
    "evidence",
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
    "limits",
    "bands",
    "cost_unit",
    "watch",
    "next_hubs",
    "scenarios",
];

/// Fields of what is taken as given.
pub const FIXED_FIELDS: [&str; 4] = ["preferential_share", "kernel_exponent", "dormant_share", "growth_variance"];

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
    let plan = outlook::plan(&body, evidence.latest, None, limits, faults);
    let questions = questions::read(&body, evidence.latest, (plan.as_ref(), Vec::new()), limits, faults);
    let stretch = Stretch::of(evidence.latest, plan.as_ref(), questions.as_ref().map_or(&[], |asked| &asked.limits));
    let arrivals = arrivals::arrivals(&body, stretch, None, faults);
    let request = OriginRequest { evidence: evidence.whole?, fit: fit?, arrivals, plan: plan?, questions: questions? };
    Some(ForecastInputs { label, request })
}

fn fit_request(body: &Object<'_>, faults: &mut Faults) -> Option<FitRequest> {
    let at = At::ROOT;
    let choice = match body.get("model").map(|raw| text(raw, at.field("model"), faults)) {
        None => Some(ModelChoice::Auto),
        Some(name) => name.and_then(|name| model_choice(&name, faults)),
    };
    let rung = match body.get("evidence").map(|raw| text(raw, at.field("evidence"), faults)) {
        None => Some(None),
        Some(name) => name.and_then(|name| rung(&name, faults)).map(Some),
    };
    let fixed = body.get("fixed").map_or(Some(Fixed::default()), |raw| fixed(raw, faults));
    if let (Some(fixed), Some(choice)) = (fixed, choice) {
        check_fixed(fixed, choice, faults);
    }
    let seed = match body.get("seed") {
        Some(raw) => whole(raw, at.field("seed"), MAX_SEED, faults),
        None => Some(DEFAULT_SEED),
    };
    let links_per_arrival = rate(body, "links_per_arrival", faults);
    let links_per_node_day = rate(body, "links_per_node_day", faults).unwrap_or(0.0);
    let [departures_per_node_day, link_losses_per_link_day] =
        ["departures_per_node_day", "link_losses_per_link_day"].map(|name| rate(body, name, faults));
    Some(FitRequest {
        choice: choice?,
        rung: rung?,
        fixed: fixed?,
        links_per_arrival,
        links_per_node_day,
        departures_per_node_day,
        link_losses_per_link_day,
        seed: seed?,
    })
}

fn model_choice(name: &str, faults: &mut Faults) -> Option<ModelChoice> {
    let choice = match name {
        "auto" => Some(ModelChoice::Auto),
        _ => Model::ALL.into_iter().find(|model| model.name() == name).map(ModelChoice::Only),
    };
    if choice.is_none() {
        let names = Model::ALL.map(Model::name).join(", ");
        faults.add(&At::ROOT.field("model"), format!("the models are auto, {names}"));
    }
    choice
}

/// The evidence that the mix is to be read from.
fn rung(name: &str, faults: &mut Faults) -> Option<Rung> {
    let rung = Rung::READ.into_iter().find(|rung| rung.name() == name);
    if rung.is_none() {
        let names = Rung::READ.map(Rung::name).join(", ");
        faults.add(&At::ROOT.field("evidence"), format!("the mix can be read from {names}"));
    }
    rung
}

fn fixed(raw: &RawValue, faults: &mut Faults) -> Option<Fixed> {
    let root = At::ROOT;
    let at = root.field("fixed");
    let body = object(raw, at, &FIXED_FIELDS, faults)?;
    let mut number = |name: &'static str| real(body.get(name)?, at.field(name), faults);
    let [share, exponent, dormant, variance] = FIXED_FIELDS.map(&mut number);
    let given = FIXED_FIELDS.iter().filter(|name| body.get(name).is_some()).count();
    if given == 0 {
        faults.add(&at, format!("nothing is given; the fields are {}", FIXED_FIELDS.join(", ")));
        return None;
    }
    let mix = share.and_then(AttachmentMix::new);
    let mut sound = [share, exponent, dormant, variance].iter().flatten().count() == given;
    let mut check = |field: &'static str, fault: Option<String>| {
        if let Some(detail) = fault {
            faults.add(&at.field(field), readable(&detail));
            sound = false;
        }
    };
    let outside = share.filter(|_| mix.is_none());
    check("preferential_share", outside.map(|share| format!("a share lies between 0 and 1, not at {share}")));
    // The model knows the range of the others.
    let forces = plain_forces(0.0).ok()?;
    let fault = |found: Result<GrowthParameters, ParameterFault>| found.err().map(|fault| fault.to_string());
    check("kernel_exponent", fault(forces.clone().with_kernel_exponent(exponent.unwrap_or(1.0))));
    check("dormant_share", fault(forces.clone().with_dormant_share(dormant.unwrap_or(0.0))));
    check("growth_variance", fault(forces.with_growth_variance(variance.unwrap_or(0.0))));
    sound.then_some(Fixed { mix, kernel_exponent: exponent, dormant_share: dormant, growth_variance: variance })
}

/// What is given must go with the model asked for.
fn check_fixed(fixed: Fixed, choice: ModelChoice, faults: &mut Faults) {
    let root = At::ROOT;
    let at = root.field("fixed");
    if let (Some(_), ModelChoice::Only(Model::Uniform | Model::Preferential)) = (fixed.mix, choice) {
        let detail =
            "a given mix does not go with the models uniform and preferential, which say what the mix is already";
        faults.add(&at, detail);
    }
    let own = [
        ("kernel_exponent", fixed.kernel_exponent.is_some(), Model::Power),
        ("dormant_share", fixed.dormant_share.is_some(), Model::Dormancy),
        ("growth_variance", fixed.growth_variance.is_some(), Model::GrowthVariance),
    ];
    let given = own.iter().filter(|(_, given, _)| *given);
    for (field, _, model) in given.clone() {
        if !matches!(choice, ModelChoice::Auto) && choice != ModelChoice::Only(*model) {
            faults.add(&at.field(field), format!("{field} goes with the models auto and {}", model.name()));
        }
    }
    if given.count() > 1 {
        faults.add(&at, "kernel_exponent, dormant_share and growth_variance exclude each other; give one of them");
    }
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
    match plain_forces(value) {
        Ok(_) => Some(value),
        Err(fault) => {
            faults.add(&at, readable(&ParameterFault { field: name, ..fault }.to_string()));
            None
        }
    }
}

/// Forces with nothing but so many links per arrival, for the ranges that the model accepts.
fn plain_forces(links_per_arrival: f64) -> Result<GrowthParameters, ParameterFault> {
    let (entry, arrivals) = (EntryDegrees::single(0), ArrivalPlan::none());
    GrowthParameters::new(DegreeKind::Received, AttachmentMix::UNIFORM, arrivals, entry, links_per_arrival)
}

//! Validated inputs of a run, their canonical form and its digest.

mod questions;

use serde::Serialize;
use sha2::{Digest, Sha256};

use super::network::kind_name;
use super::numbers::{Real, date_text};
use crate::evaluate::OriginRequest;
use crate::fit::{FitRequest, ModelChoice, Rung};
use crate::model::{ArrivalPlan, AttachmentCell, Evidence, ForecastPlan, LinkEvents, Transitions};
use questions::CanonicalQuestions;

/// The largest seed: 2^53 − 1, the largest whole number every JSON reader keeps exactly.
pub const MAX_SEED: u64 = (1 << 53) - 1;
/// Seed when none is given.
pub const DEFAULT_SEED: u64 = 1;
/// Risk of a limit when none is given.
pub const DEFAULT_RISK: f64 = 0.05;
const MAX_LABEL_CHARS: usize = 200;

/// A caller's name for a run: at most 200 characters, no NUL.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Label(String);

/// What is wrong with a text.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum TextFault {
    /// Too many characters.
    #[error("the text has {length} characters; at most {most} are kept")]
    TooLong {
        /// Its characters.
        length: usize,
        /// The most.
        most: usize,
    },
    /// A NUL character.
    #[error("the text holds a NUL character (\\u0000); leave it out")]
    Nul,
}

/// The text, when it has at most `most` characters and no NUL.
pub(super) fn checked_text(text: String, most: usize) -> Result<String, TextFault> {
    if text.contains('\0') {
        return Err(TextFault::Nul);
    }
    match text.chars().count() {
        length if length > most => Err(TextFault::TooLong { length, most }),
        _ => Ok(text),
    }
}

impl Label {
    /// Checks a label.
    ///
    /// # Errors
    /// When it is too long or holds a NUL character.
    pub fn new(text: String) -> Result<Self, TextFault> {
        checked_text(text, MAX_LABEL_CHARS).map(Self)
    }

    /// The text.
    pub fn as_str(&self) -> &str {
        &self.0
    }
}

/// Everything one forecast needs.
#[derive(Debug, Clone, PartialEq)]
pub struct ForecastInputs {
    /// The caller's name for the run.
    pub label: Option<Label>,
    /// What the core is asked.
    pub request: OriginRequest,
}

/// Everything one fit needs.
#[derive(Debug, Clone, PartialEq)]
pub struct FitInputs {
    /// The caller's name for the run.
    pub label: Option<Label>,
    /// What is known of the network.
    pub evidence: Evidence,
    /// What is asked of the fit.
    pub fit: FitRequest,
}

/// Inputs in the one form that equal inputs share, however they were written: degrees ascending, defaults filled in,
/// dates resolved. The seed and the label are not part of it.
#[derive(Serialize)]
struct Canonical<'a> {
    asked: &'static str,
    degree_kind: &'static str,
    snapshots: Vec<CanonicalSnapshot>,
    entry_degrees: Option<&'a [(u64, f64)]>,
    // Left out when there are none, as in inputs from before they could be given: digests do not change.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    transitions: Vec<CanonicalTransitions>,
    #[serde(skip_serializing_if = "Option::is_none")]
    link_events: Option<CanonicalLinkEvents>,
    model: &'static str,
    preferential_share: Option<Real>,
    links_per_arrival: Option<Real>,
    links_per_node_day: Real,
    // Without transitions a loss that is not given is none.
    #[serde(skip_serializing_if = "Option::is_none")]
    departures_per_node_day: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    link_losses_per_link_day: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    evidence: Option<&'static str>,
    #[serde(skip_serializing_if = "Option::is_none")]
    kernel_exponent: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    dormant_share: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    growth_variance: Option<Real>,
    #[serde(flatten)]
    outlook: Option<CanonicalOutlook<'a>>,
}

#[derive(Serialize)]
struct CanonicalSnapshot {
    as_of: String,
    degree_counts: Vec<(u64, u64)>,
}

#[derive(Serialize)]
struct CanonicalTransitions {
    from: String,
    to: String,
    counts: Vec<(Option<u64>, Option<u64>, u64)>,
}

#[derive(Serialize)]
struct CanonicalLinkEvents {
    ratios: Vec<(Real, Real, u64)>,
    windows: Vec<Vec<CanonicalCell>>,
}

/// Lowest and highest degree, landings, node exposure, end exposure.
#[derive(Serialize)]
struct CanonicalCell(u64, u64, u64, Real, Real);

/// What a forecast needs beyond a fit.
#[derive(Serialize)]
struct CanonicalOutlook<'a> {
    /// `(days after the last snapshot, arrivals a day, growth a year)`
    arrivals: Option<Vec<(Real, Real, Real)>>,
    // Left out when rates are certain, as in inputs from before they could be uncertain.
    #[serde(skip_serializing_if = "Option::is_none")]
    arrivals_log_deviation: Option<Real>,
    thresholds: &'a [u64],
    dates: Vec<String>,
    levels: &'a [f64],
    // Left out when nothing is asked besides, as in inputs from before it could be: digests do not change.
    #[serde(flatten)]
    questions: CanonicalQuestions<'a>,
}

impl ForecastInputs {
    /// The canonical form, as JSON.
    ///
    /// # Errors
    /// When a number is not finite, which no validated input holds.
    pub fn canonical(&self) -> Result<String, serde_json::Error> {
        let request = &self.request;
        let mut canonical = canonical_fit("forecast", &request.evidence, &request.fit);
        canonical.outlook = Some(canonical_outlook(request));
        serde_json::to_string(&canonical)
    }
}

impl FitInputs {
    /// The canonical form, as JSON.
    ///
    /// # Errors
    /// When a number is not finite, which no validated input holds.
    pub fn canonical(&self) -> Result<String, serde_json::Error> {
        serde_json::to_string(&canonical_fit("fit", &self.evidence, &self.fit))
    }
}

fn canonical_fit<'a>(asked: &'static str, evidence: &'a Evidence, fit: &FitRequest) -> Canonical<'a> {
    let known = !evidence.transitions().is_empty();
    let given = |rate: Option<f64>| rate.or((!known).then_some(0.0)).map(Real);
    Canonical {
        asked,
        degree_kind: kind_name(evidence.kind()),
        snapshots: evidence
            .snapshots()
            .iter()
            .map(|s| CanonicalSnapshot { as_of: date_text(s.as_of), degree_counts: s.counts.iter().collect() })
            .collect(),
        entry_degrees: evidence.entry().map(|entry| entry.shares()),
        transitions: evidence.transitions().iter().map(canonical_transitions).collect(),
        link_events: evidence.link_events().map(canonical_link_events),
        model: match fit.choice {
            ModelChoice::Auto => "auto",
            ModelChoice::Only(model) => model.name(),
        },
        preferential_share: fit.fixed.mix.map(|mix| Real(mix.preferential_share())),
        links_per_arrival: fit.links_per_arrival.map(Real),
        links_per_node_day: Real(fit.links_per_node_day),
        departures_per_node_day: given(fit.departures_per_node_day),
        link_losses_per_link_day: given(fit.link_losses_per_link_day),
        evidence: fit.rung.map(Rung::name),
        kernel_exponent: fit.fixed.kernel_exponent.map(Real),
        dormant_share: fit.fixed.dormant_share.map(Real),
        growth_variance: fit.fixed.growth_variance.map(Real),
        outlook: None,
    }
}

fn canonical_transitions(table: &Transitions) -> CanonicalTransitions {
    CanonicalTransitions {
        from: date_text(table.from()),
        to: date_text(table.to()),
        counts: table.moves().iter().map(|row| (row.before, row.after, row.nodes)).collect(),
    }
}

fn canonical_link_events(events: &LinkEvents) -> CanonicalLinkEvents {
    let cell = |cell: &AttachmentCell| {
        CanonicalCell(cell.lowest, cell.highest, cell.landings, Real(cell.node_exposure), Real(cell.end_exposure))
    };
    CanonicalLinkEvents {
        ratios: events.ratios().iter().map(|class| (Real(class.ratio), Real(class.variance), class.landings)).collect(),
        windows: events.windows().iter().map(|window| window.cells.iter().map(cell).collect()).collect(),
    }
}

fn canonical_outlook(request: &OriginRequest) -> CanonicalOutlook<'_> {
    let plan: &ForecastPlan = &request.plan;
    let segments = |arrivals: &ArrivalPlan| {
        let segments = arrivals.segments().iter();
        segments.map(|s| (Real(s.from_day), Real(s.per_day), Real(s.growth_per_year))).collect()
    };
    CanonicalOutlook {
        arrivals: request.arrivals.as_ref().map(segments),
        arrivals_log_deviation: (request.arrivals.as_ref().map(ArrivalPlan::log_deviation))
            .filter(|&deviation| deviation > 0.0)
            .map(Real),
        thresholds: plan.thresholds(),
        dates: plan.dates().iter().map(|&date| date_text(date)).collect(),
        levels: plan.levels(),
        questions: CanonicalQuestions::from(&request.questions),
    }
}

/// SHA-256 of `bytes` in lower-case hexadecimal.
pub fn sha256_hex(bytes: &[u8]) -> String {
    Sha256::digest(bytes).iter().map(|byte| format!("{byte:02x}")).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::model::{DegreeCounts, DegreeKind, Levels, Snapshot, Thresholds};

    /// What is left out of the form when it is not given keeps the digests of inputs from before it could be.
    #[test]
    fn the_canonical_form_of_plain_inputs_stays_what_it_was() {
        let at = |text: &str| text.parse().unwrap();
        let counts = DegreeCounts::from_pairs(&[(0, 5), (2, 10)]).unwrap();
        let as_of = at("2026-06-01T00:00:00Z");
        let evidence = Evidence::new(DegreeKind::Received, vec![Snapshot { as_of, counts }], None).unwrap();
        let thresholds = Thresholds::new(&[10]).unwrap();
        let plan = ForecastPlan::new(as_of, thresholds, &[at("2026-07-01T00:00:00Z")], Levels::default()).unwrap();
        let inputs = |arrivals| {
            let (evidence, plan) = (evidence.clone(), plan.clone());
            let request =
                OriginRequest { evidence, fit: FitRequest::default(), arrivals, plan, questions: Default::default() };
            ForecastInputs { label: None, request }.canonical().unwrap()
        };
        let plain = ArrivalPlan::constant(50.0).unwrap();
        assert_eq!(
            inputs(Some(plain.clone())),
            "{\"asked\":\"forecast\",\"degree_kind\":\"received\",\"snapshots\":[{\"as_of\":\"2026-06-01\",\"degree_counts\":\
             [[0,5],[2,10]]}],\"entry_degrees\":null,\"model\":\"auto\",\"preferential_share\":null,\"links_per_arrival\":null,\
             \"links_per_node_day\":0.0,\"departures_per_node_day\":0.0,\"link_losses_per_link_day\":0.0,\"arrivals\":\
             [[0.0,50.0,0.0]],\"thresholds\":[10],\"dates\":[\"2026-07-01\"],\"levels\":[0.5,0.9]}"
        );
        let vague = inputs(Some(plain.with_log_deviation(0.25).unwrap()));
        assert!(vague.contains("\"arrivals_log_deviation\":0.25"), "{vague}");
    }
}

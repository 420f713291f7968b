//! The report of a comparison: kept scenarios beside the forecast as it stands.

use super::questions::{limits, what_ifs};
use super::{Report, ReportError, fact, makers, reading, shown, subject};
use crate::report::charts::Theme;
use crate::service::{ForecastAnswer, ScenarioAnswer};

/// A comparison as a page, of a network whose newest snapshot is of this date; `address` is where it is asked for.
///
/// # Errors
/// When a chart or the page cannot be made, which is a fault of ours.
pub fn comparison_page(
    answer: &ForecastAnswer,
    (network, as_of): (&str, &str),
    address: &str,
    theme: Theme,
) -> Result<String, ReportError> {
    let mut facts = vec![fact("Newest snapshot", as_of)];
    facts.extend(makers(&answer.engine, answer.seed, &answer.inputs_digest));
    let mut standing = limits(&answer.limits);
    standing.heading = "Limits as it stands".to_owned();
    let mut sections = vec![what_ifs(answer, theme)?, standing];
    sections.retain(|section| !section.is_empty());
    Report {
        theme,
        subject: subject("Comparison", Some(network), None),
        finding: finding(&answer.scenarios),
        lead: Vec::new(),
        facts,
        sections,
        warnings: answer.warnings.clone(),
        cautions: answer.cautions.clone(),
        again: reading(address, ""),
    }
    .html()
}

/// The what-if that changes most, in words.
fn finding(scenarios: &[ScenarioAnswer]) -> String {
    let effect = |scenario: &ScenarioAnswer| {
        let tails = scenario.dates.last().map(|at| at.tail.as_slice()).unwrap_or_default();
        let relative = tails.iter().map(|tail| (tail.difference.expected.0 / tail.standing.0.max(0.5)).abs());
        relative.fold(0.0, f64::max)
    };
    let most = scenarios.iter().max_by(|a, b| effect(a).total_cmp(&effect(b)));
    most.map_or_else(|| "No scenario was compared".to_owned(), shown_verdict)
}

/// The verdict starts with the scenario's name, which may be long.
fn shown_verdict(scenario: &ScenarioAnswer) -> String {
    match scenario.verdict.strip_prefix(scenario.name.as_str()) {
        Some(rest) => format!("{}{rest}", shown(&scenario.name)),
        None => scenario.verdict.clone(),
    }
}

//! Reports of one page: HTML that is complete in itself and prints.

mod backtest;
mod comparison;
mod figures;
mod fit;
mod forecast;
mod grid;
mod growth;
mod questions;

use askama::Template;
use clap::ValueEnum;
use thiserror::Error;

use super::charts::Theme;
use crate::service::{ForecastAnswer, WarningAnswer};
use figures::Figure;
use grid::Grid;

pub use backtest::backtest_page;
pub use comparison::comparison_page;
pub use fit::fit_page;
pub use forecast::{forecast_page, inline_page};

/// Most characters of a caller's name on a page.
const NAME_CHARS: usize = 80;

/// The look of every report, light and dark, on screens and on paper.
const STYLE: &str = include_str!("page/style.css");

/// Why a report could not be made.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
#[error("making a report: {0}")]
pub struct ReportError(String);

impl From<askama::Error> for ReportError {
    fn from(error: askama::Error) -> Self {
        Self(error.to_string())
    }
}

/// What a report tells, from its heading down.
#[derive(Debug, Template)]
#[template(path = "report.html")]
struct Report {
    /// Colours.
    theme: Theme,
    /// What kind of report it is, and of what.
    subject: String,
    /// The finding: the heading.
    finding: String,
    /// What else is to be known at a glance.
    lead: Vec<String>,
    /// When, from what, by what.
    facts: Vec<Fact>,
    sections: Vec<Section>,
    warnings: Vec<WarningAnswer>,
    cautions: Vec<String>,
    /// How to have the figures again: what comes, and the command.
    again: Vec<Fact>,
}

/// A name with what it stands for.
#[derive(Debug)]
struct Fact {
    name: &'static str,
    text: String,
}

/// A part of a report under a heading of its own.
#[derive(Debug, Default)]
struct Section {
    heading: String,
    paragraphs: Vec<String>,
    figures: Vec<Figure>,
    facts: Vec<Fact>,
    grids: Vec<Grid>,
}

impl Section {
    fn new(heading: impl Into<String>) -> Self {
        Self { heading: heading.into(), ..Self::default() }
    }

    fn is_empty(&self) -> bool {
        self.paragraphs.is_empty() && self.figures.is_empty() && self.facts.is_empty() && self.grids.is_empty()
    }
}

impl Report {
    fn style(&self) -> &'static str {
        STYLE
    }

    fn theme_name(&self) -> String {
        self.theme.to_possible_value().map(|value| value.get_name().to_owned()).unwrap_or_default()
    }

    fn html(&self) -> Result<String, ReportError> {
        Ok(self.render()?)
    }
}

fn fact(name: &'static str, text: impl Into<String>) -> Fact {
    Fact { name, text: text.into() }
}

/// What an answer was made by.
fn makers(engine: &str, seed: u64, digest: &str) -> [Fact; 3] {
    [fact("Engine", engine), fact("Seed", seed.to_string()), fact("Inputs", digest)]
}

/// The commands that read an address again.
fn reading(address: &str, tables: &str) -> Vec<Fact> {
    let quoted = |address: String| format!("curl -s '{}'", address.replace('\'', "%27"));
    let form = |form: &str| {
        let separator = if address.contains('?') { '&' } else { '?' };
        quoted(format!("{address}{separator}format={form}"))
    };
    vec![
        fact("All figures, JSON", form("json")),
        Fact { name: "A table, CSV", text: form(&format!("csv{tables}")) },
        fact("This report", form("html")),
    ]
}

/// A caller's text as a page shows it.
fn shown(text: &str) -> String {
    super::words::short(text, NAME_CHARS)
}

/// Of what a report is: its kind, the network and the caller's name for the run.
fn subject(kind: &str, network: Option<&str>, label: Option<&str>) -> String {
    let names = [network, label].into_iter().flatten().map(shown);
    [kind.to_owned()].into_iter().chain(names).collect::<Vec<_>>().join(" · ")
}

/// The newest snapshot's date, and what stands on it.
fn newest(answer: &ForecastAnswer) -> Option<Fact> {
    let _ = answer;
    None
}

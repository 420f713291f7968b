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

    fn html(mut self) -> Result<String, ReportError> {
        let prose = self.sections.iter_mut().flat_map(|section| &mut section.paragraphs);
        let prose = prose.chain(&mut self.lead).chain(&mut self.cautions).chain([&mut self.finding]);
        prose.chain(self.warnings.iter_mut().map(|warning| &mut warning.detail)).for_each(|text| *text = tied(text));
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
        fact("A table, CSV", form(&format!("csv{tables}"))),
        fact("This report", form("html")),
    ]
}

/// A text whose percent signs stay with their figures at the ends of lines.
fn tied(text: &str) -> String {
    text.replace(" %", "\u{a0}%")
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

/// What a forecast counts from; older runs do not say.
fn newest(answer: &ForecastAnswer) -> Option<Fact> {
    let last = answer.history.last()?;
    let (as_of, nodes) = (&last.as_of, super::text::figure(last.nodes as f64));
    Some(fact("Newest snapshot", format!("{as_of}, {nodes} nodes")))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::content_policy;

    fn report(text: &str, theme: Theme) -> Report {
        let grid = Grid {
            caption: text.to_owned(),
            corner: text.to_owned(),
            columns: vec![text.to_owned()],
            rows: vec![grid::Row::new(text, vec![grid::Cell::new(text, text)])],
        };
        let section = Section {
            heading: text.to_owned(),
            paragraphs: vec![text.to_owned()],
            figures: vec![Figure { svg: "<svg></svg>".to_owned(), on_screen_only: true }],
            facts: vec![fact("Seed", text)],
            grids: vec![grid],
        };
        Report {
            theme,
            subject: text.to_owned(),
            finding: text.to_owned(),
            lead: vec![text.to_owned()],
            facts: vec![fact("Run", text)],
            sections: vec![section],
            warnings: vec![WarningAnswer { code: "few_hubs".to_owned(), detail: text.to_owned() }],
            cautions: vec![text.to_owned()],
            again: vec![fact("JSON", text)],
        }
    }

    #[test]
    fn every_text_is_escaped_wherever_it_stands() {
        let page = report("</style><script>\"'&", Theme::Auto).html().unwrap();
        assert!(!page.contains("<script") && page.matches("</style>").count() == 1, "{page}");
        assert_eq!(page.matches("&#60;/style&#62;&#60;script&#62;&#34;&#39;&#38;").count(), 19, "{page}");
        assert!(content_policy(&page).contains("'sha256-"), "the style of the page itself is let in");
    }

    #[test]
    fn a_page_says_its_language_its_colours_and_what_is_for_screens() {
        let page = report("x", Theme::Dark).html().unwrap();
        for markup in [
            "<html lang=\"en\" class=\"dark\">",
            "<h1>x</h1>",
            "<caption>x</caption>",
            "<th scope=\"col\">x</th>",
            "<th scope=\"row\">x</th>",
            " class=\"screen\"><svg></svg></figure>",
        ] {
            assert!(page.contains(markup), "{markup}: {page}");
        }
    }

    #[test]
    fn commands_are_one_word_a_text() {
        let commands = reading("http://h/v1/x?a='b", "&part=tail");
        assert_eq!(commands[1].text, "curl -s 'http://h/v1/x?a=%27b&format=csv&part=tail'");
        assert_eq!(reading("http://h/x", "")[0].text, "curl -s 'http://h/x?format=json'");
    }
}

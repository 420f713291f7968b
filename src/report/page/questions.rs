//! What was asked of a forecast besides the tails.

use super::figures::figures;
use super::forecast::with_interval;
use super::grid::{Cell, Grid, Row, crossed};
use super::{NAME_CHARS, ReportError, Section, shown};
use crate::report::charts::{ForecastChart, Theme, forecast_chart};
use crate::report::csv::percent;
use crate::report::text::figure;
use crate::report::words::{band_range, bands_title, chance, rate_words, reached, scenario_costs, signed, watch_words};
use crate::service::{
    BandsAnswer, ForecastAnswer, IntervalAnswer, LimitAnswer, NextHubsAnswer, ScenarioAnswer, WatchAnswer,
};

/// A section for each kind of question.
pub fn questions(answer: &ForecastAnswer, theme: Theme) -> Result<Vec<Section>, ReportError> {
    let mut sections = vec![limits(&answer.limits)];
    sections.extend(answer.bands.as_ref().map(costs));
    sections.extend(answer.watch.as_ref().map(watched));
    sections.push(largest(&answer.next_hubs));
    sections.push(what_ifs(answer, theme)?);
    Ok(sections)
}

/// Limits: one row each, then in words.
pub fn limits(limits: &[LimitAnswer]) -> Section {
    let mut section = Section::new("Limits");
    if limits.is_empty() {
        return section;
    }
    for limit in limits {
        let verdict = format!("{}.", limit.verdict.trim_end_matches('.'));
        section.paragraphs.push([verdict].into_iter().chain(rate_words(limit)).collect::<Vec<_>>().join(" "));
    }
    let crossing = |limit: &LimitAnswer| limit.crossing.iter().map(|at| reached(at).into()).collect::<Vec<Cell>>();
    let rows = limits.iter().map(|limit| {
        let name = limit.name.as_deref().map_or_else(|| format!("at most {}", figure(limit.max_nodes as f64)), shown);
        let what = format!("{} with {} links or more", figure(limit.max_nodes as f64), figure(limit.threshold as f64));
        let mut cells =
            vec![figure(limit.now as f64).into(), Cell::new(chance(limit.at_by.crossed.0), format!("by {}", limit.by))];
        cells.extend(crossing(limit));
        cells.push(Cell::new(reached(&limit.risk_reached), format!("risk of {}", chance(limit.risk.0))));
        Row::new(Cell::new(name, what), cells)
    });
    let mut columns = vec!["now".to_owned(), "crossed by then".to_owned()];
    let first = limits.first().map(|limit| limit.crossing.as_slice()).unwrap_or_default();
    columns.extend(first.iter().map(|at| format!("{} likely by", chance(at.probability.0))));
    columns.push("risk reached".to_owned());
    let caption = "How each limit fares; a dash: not by the last date looked at".to_owned();
    section.grids.push(Grid { caption, corner: "limit".to_owned(), columns, rows: rows.collect() });
    section
}

fn costs(bands: &BandsAnswer) -> Section {
    let mut section = Section::new(bands_title(bands, NAME_CHARS));
    let first = bands.dates.first();
    let mut columns = vec!["total".to_owned()];
    columns.extend(
        first.into_iter().flat_map(|at| &at.bands).map(|band| format!("{} links", band_range(band).replace(">=", "≥"))),
    );
    let dates: Vec<String> = bands.dates.iter().map(|at| at.date.clone()).collect();
    let cell = |row: usize, column: usize| {
        let Some(at) = bands.dates.get(row) else { return Cell::default() };
        let amount = match column.checked_sub(1) {
            None => Some(&at.total),
            Some(band) => at.bands.get(band).map(|band| &band.cost),
        };
        amount.map(|amount| with_interval(figure(amount.expected.0), &amount.intervals)).unwrap_or_default()
    };
    let level = first.and_then(|at| at.total.intervals.last()).map(beside).unwrap_or_default();
    section.grids = crossed(&format!("Costs by degree: expected{level}"), ("date", &dates), ("band", &columns), &cell);
    section
}

fn watched(watch: &WatchAnswer) -> Section {
    let mut section = Section::new("Watched nodes");
    section.paragraphs = watch_words(watch, NAME_CHARS);
    let mut rows = Vec::new();
    for node in &watch.nodes {
        let expected =
            node.dates.last().map(|at| with_interval(figure(at.expected.0), &at.intervals)).unwrap_or_default();
        let own = vec![figure(node.degree as f64).into(), expected];
        if node.passing.is_empty() {
            let none = vec!["past all".into(), Cell::default(), Cell::default()];
            rows.push(Row::new(shown(&node.name), [own.clone(), none].concat()));
        }
        for passing in &node.passing {
            let Some(last) = passing.dates.last() else { continue };
            let even = passing.crossing.iter().find(|at| at.probability.0 == 0.5).map(reached).unwrap_or_default();
            let chances = vec![
                figure(passing.threshold as f64).into(),
                Cell::new(chance(last.passed.0), format!("by {}", last.date)),
                even.into(),
            ];
            rows.push(Row::new(shown(&node.name), [own.clone(), chances].concat()));
        }
    }
    if !rows.is_empty() {
        let columns = ["links now", "links expected", "threshold", "chance to pass it", "even chance by"];
        let caption = "Each watched node, and its chance to pass each threshold".to_owned();
        section.grids.push(Grid {
            caption,
            corner: "node".to_owned(),
            columns: columns.map(str::to_owned).into(),
            rows,
        });
    }
    section
}

fn largest(dates: &[NextHubsAnswer]) -> Section {
    let mut section = Section::new("Largest nodes");
    let ranks = dates.first().map(|at| at.ranks.as_slice()).unwrap_or_default();
    let names: Vec<String> = ranks.iter().map(|hub| hub.rank.to_string()).collect();
    let columns: Vec<String> = ["now".to_owned()].into_iter().chain(dates.iter().map(|at| at.date.clone())).collect();
    let cell = |row: usize, column: usize| match column.checked_sub(1) {
        None => ranks.get(row).and_then(|hub| hub.now).map_or("-".to_owned(), |degree| figure(degree as f64)).into(),
        Some(date) => {
            let hub = dates.get(date).and_then(|at| at.ranks.get(row));
            hub.map(|hub| with_interval(figure(hub.expected.0), &hub.intervals)).unwrap_or_default()
        }
    };
    if !ranks.is_empty() {
        let level = ranks.first().and_then(|hub| hub.intervals.last()).map(beside).unwrap_or_default();
        let caption = format!("Links of the node of each rank: expected{level}");
        section.grids = crossed(&caption, ("rank", &names), ("date", &columns), &cell);
    }
    section
}

/// What-ifs beside the forecast as it stands.
pub fn what_ifs(answer: &ForecastAnswer, theme: Theme) -> Result<Section, ReportError> {
    let mut section = Section::new("What if");
    if answer.scenarios.is_empty() {
        return Ok(section);
    }
    section.figures = figures(vec![forecast_chart(answer, ForecastChart::Scenarios, None, theme)])?;
    for scenario in &answer.scenarios {
        section.paragraphs.push(format!("{}.", scenario.verdict.trim_end_matches('.')));
        section.paragraphs.extend(scenario_costs(scenario, NAME_CHARS));
        for limit in &scenario.limits {
            section.paragraphs.push(format!("{}: {}.", shown(&scenario.name), limit.verdict.trim_end_matches('.')));
        }
        section.grids.extend(differences(scenario));
    }
    Ok(section)
}

fn differences(scenario: &ScenarioAnswer) -> Vec<Grid> {
    let tails = scenario.dates.first().map(|at| at.tail.as_slice()).unwrap_or_default();
    let columns: Vec<String> = tails.iter().map(|tail| format!("≥ {}", figure(tail.threshold as f64))).collect();
    let dates: Vec<String> = scenario.dates.iter().map(|at| at.date.clone()).collect();
    let cell = |row: usize, column: usize| {
        let Some(tail) = scenario.dates.get(row).and_then(|at| at.tail.get(column)) else { return Cell::default() };
        let interval = tail.difference.intervals.last();
        let interval = interval.map(|i| format!(" ({} to {})", signed(i.low.0), signed(i.high.0))).unwrap_or_default();
        Cell::new(figure(tail.scenario.0), format!("{}{interval}", signed(tail.difference.expected.0)))
    };
    let level = tails.first().and_then(|tail| tail.difference.intervals.last());
    let level = level.map(|i| format!(" (its {} % interval)", percent(i.level.0))).unwrap_or_default();
    let caption = format!(
        "{}: nodes with at least so many links, and how many more or fewer than as it stands{level}",
        shown(&scenario.name)
    );
    crossed(&caption, ("date", &dates), ("links", &columns), &cell)
}

/// What stands with a figure.
fn beside(widest: &IntervalAnswer) -> String {
    format!(" with its {} % interval", percent(widest.level.0))
}

//! Answers to what is asked besides the tails, for a planner to read under the table of tails.

use super::csv::percent;
use super::table::align;
use super::text::{figure, wrap};
use super::words::{
    band_range, bands_title, chance, crossing_words, ends, limit_title, rate_words, reached, scenario_costs, short,
    signed, watch_words,
};
use crate::service::{
    AmountAnswer, BandsAnswer, ForecastAnswer, IntervalAnswer, LimitAnswer, NextHubsAnswer, ScenarioAnswer,
    TailDifferenceAnswer, WatchAnswer,
};

/// Widest line of prose.
const WIDTH: usize = 100;
/// Most characters of a caller's name in a row.
const NAME_CHARS: usize = 24;

/// A block of lines for each question asked, an empty line before each.
pub fn question_lines(answer: &ForecastAnswer) -> Vec<String> {
    let mut lines = Vec::new();
    let mut block = |title: String, inside: Vec<String>| {
        lines.push(String::new());
        lines.extend(wrap(&title, WIDTH, "  "));
        lines.extend(inside);
    };
    for limit in &answer.limits {
        block(limit_title(limit, NAME_CHARS), limit_lines(limit));
    }
    if let Some(bands) = &answer.bands {
        block(bands_title(bands, NAME_CHARS), bands_lines(bands));
    }
    if let Some(watch) = &answer.watch {
        block("Watched nodes, and their chance to pass each threshold".to_owned(), watch_lines(watch));
    }
    if !answer.next_hubs.is_empty() {
        block("Largest nodes".to_owned(), hub_lines(&answer.next_hubs));
    }
    for scenario in &answer.scenarios {
        block(format!("What if: {}", short(&scenario.name, NAME_CHARS)), scenario_lines(scenario));
    }
    lines
}

fn limit_lines(limit: &LimitAnswer) -> Vec<String> {
    let words = [limit.verdict.clone(), crossing_words(limit)].into_iter().chain(rate_words(limit));
    let mut lines: Vec<String> = words.flat_map(|text| paragraph(&text)).collect();
    let mut cells = vec![["date", "above the limit", "crossed by then"].map(str::to_owned).to_vec()];
    for at in &limit.dates {
        cells.push(vec![at.date.clone(), chance(at.exceeding.0), chance(at.crossed.0)]);
    }
    lines.extend(indented(&cells));
    lines
}

fn bands_lines(bands: &BandsAnswer) -> Vec<String> {
    let first = bands.dates.first().map(|at| at.total.intervals.as_slice()).unwrap_or_default();
    let mut cells = vec![["date", "links", "nodes", "expected"].map(str::to_owned).to_vec()];
    add_interval_title(&mut cells, first);
    for at in &bands.dates {
        for band in &at.bands {
            cells.push(amount_row(vec![String::new(), band_range(band), figure(band.nodes.0)], &band.cost));
        }
        let total = amount_row(vec![at.date.clone(), "total".to_owned(), String::new()], &at.total);
        cells.push(total);
    }
    indented(&cells)
}

fn watch_lines(watch: &WatchAnswer) -> Vec<String> {
    let mut cells = vec![
        ["node", "links now", "expected", "threshold", "chance", "by", "even chance by"].map(str::to_owned).to_vec(),
    ];
    for node in &watch.nodes {
        let expected = node.dates.last().map(|at| figure(at.expected.0)).unwrap_or_default();
        let own = vec![short(&node.name, NAME_CHARS), figure(node.degree as f64), expected];
        if node.passing.is_empty() {
            cells.push([own.clone(), vec!["past all".to_owned()]].concat());
        }
        for passing in &node.passing {
            let Some(last) = passing.dates.last() else { continue };
            let even = passing.crossing.iter().find(|at| at.probability.0 == 0.5).map(reached).unwrap_or_default();
            let chances = vec![figure(passing.threshold as f64), chance(last.passed.0), last.date.clone(), even];
            cells.push([own.clone(), chances].concat());
        }
    }
    let mut lines = if watch.nodes.is_empty() { Vec::new() } else { indented(&cells) };
    lines.extend(watch_words(watch, NAME_CHARS).iter().flat_map(|text| paragraph(text)));
    lines
}

fn hub_lines(dates: &[NextHubsAnswer]) -> Vec<String> {
    let ranks = dates.first().map(|at| at.ranks.as_slice()).unwrap_or_default();
    let mut cells = vec![["date", "rank", "links now", "expected", "median"].map(str::to_owned).to_vec()];
    add_interval_title(&mut cells, ranks.first().map(|hub| hub.intervals.as_slice()).unwrap_or_default());
    for at in dates {
        let mut date = at.date.as_str();
        for hub in &at.ranks {
            let now = hub.now.map_or("-".to_owned(), |degree| figure(degree as f64));
            let mut row = vec![date.to_owned(), hub.rank.to_string(), now, figure(hub.expected.0)];
            row.push(figure(hub.median.0));
            row.extend(hub.intervals.last().map(ends));
            cells.push(row);
            date = "";
        }
    }
    indented(&cells)
}

fn scenario_lines(scenario: &ScenarioAnswer) -> Vec<String> {
    let mut lines = paragraph(&scenario.verdict);
    let tails = scenario.dates.first().map(|at| at.tail.as_slice()).unwrap_or_default();
    let mut cells =
        vec![["date", "hubs: links >=", "as it stands", "what if", "difference"].map(str::to_owned).to_vec()];
    add_interval_title(&mut cells, tails.first().map(|tail| tail.difference.intervals.as_slice()).unwrap_or_default());
    for at in &scenario.dates {
        let mut date = at.date.as_str();
        for TailDifferenceAnswer { threshold, standing, scenario, difference, .. } in &at.tail {
            let mut row = vec![date.to_owned(), figure(*threshold as f64), figure(standing.0), figure(scenario.0)];
            row.push(signed(difference.expected.0));
            row.extend(difference.intervals.last().map(|i| format!("{} to {}", signed(i.low.0), signed(i.high.0))));
            cells.push(row);
            date = "";
        }
    }
    lines.extend(indented(&cells));
    for limit in &scenario.limits {
        lines.extend(paragraph(&format!("{}: {}", limit_title(limit, NAME_CHARS), limit.verdict)));
    }
    lines.extend(scenario_costs(scenario, NAME_CHARS).iter().flat_map(|text| paragraph(text)));
    lines
}

/// The widest interval has a column; narrower ones are in the other forms.
fn add_interval_title(cells: &mut [Vec<String>], intervals: &[IntervalAnswer]) {
    if let (Some(header), Some(widest)) = (cells.first_mut(), intervals.last()) {
        header.push(format!("{} % interval", percent(widest.level.0)));
    }
}

fn amount_row(mut row: Vec<String>, amount: &AmountAnswer) -> Vec<String> {
    row.push(figure(amount.expected.0));
    row.extend(amount.intervals.last().map(ends));
    row
}

fn paragraph(text: &str) -> Vec<String> {
    if text.is_empty() {
        return Vec::new();
    }
    wrap(&format!("  {text}"), WIDTH - 2, "  ").into_iter().map(|line| format!("  {}", line.trim_start())).collect()
}

fn indented(cells: &[Vec<String>]) -> Vec<String> {
    align(cells).into_iter().map(|line| format!("  {line}")).collect()
}

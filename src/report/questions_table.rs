//! Answers to what is asked besides the tails, for a planner to read under the table of tails.

use super::csv::percent;
use super::table::align;
use super::text::{figure, wrap};
use crate::service::{
    AmountAnswer, BandsAnswer, DateAtAnswer, ForecastAnswer, IntervalAnswer, LimitAnswer, NextHubsAnswer,
    ScenarioAnswer, TailDifferenceAnswer, WatchAnswer,
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
        block(limit_title(limit), limit_lines(limit));
    }
    if let Some(bands) = &answer.bands {
        block(bands_title(bands), bands_lines(bands));
    }
    if let Some(watch) = &answer.watch {
        block("Watched nodes, and their chance to pass each threshold".to_owned(), watch_lines(watch));
    }
    if !answer.next_hubs.is_empty() {
        block("Largest nodes".to_owned(), hub_lines(&answer.next_hubs));
    }
    for scenario in &answer.scenarios {
        block(format!("What if: {}", short(&scenario.name)), scenario_lines(scenario));
    }
    lines
}

fn limit_title(limit: &LimitAnswer) -> String {
    let name = limit.name.as_deref().map(|name| format!(" {}", short(name))).unwrap_or_default();
    format!(
        "Limit{name}: at most {} nodes with >= {} links until {}, at a risk of {}",
        figure(limit.max_nodes as f64),
        figure(limit.threshold as f64),
        limit.by,
        chance(limit.risk.0)
    )
}

fn limit_lines(limit: &LimitAnswer) -> Vec<String> {
    let mut lines = paragraph(&limit.verdict);
    let crossing: Vec<String> =
        limit.crossing.iter().map(|at| format!("{} {}", chance(at.probability.0), by_date(at))).collect();
    let left = limit.days_left.map(|days| format!(", in {} days", figure(days.0.round()))).unwrap_or_default();
    lines.extend(paragraph(&format!(
        "{} such nodes today. Crossed with probability {}; the risk is reached {}{left}.",
        figure(limit.now as f64),
        crossing.join(", "),
        by_date(&limit.risk_reached)
    )));
    for (rate, found) in [("Arrivals", &limit.arrivals), ("Links per arrival", &limit.links_per_arrival)] {
        if !found.detail.is_empty() {
            lines.extend(paragraph(&format!("{rate}: {}.", found.detail.trim_end_matches('.'))));
        }
    }
    let mut cells = vec![["date", "above the limit", "crossed by then"].map(str::to_owned).to_vec()];
    for at in &limit.dates {
        cells.push(vec![at.date.clone(), chance(at.exceeding.0), chance(at.crossed.0)]);
    }
    lines.extend(indented(&cells));
    lines
}

fn bands_title(bands: &BandsAnswer) -> String {
    let unit = bands.cost_unit.as_deref().map(|unit| format!(" in {}", short(unit))).unwrap_or_default();
    let peak = bands.peak.as_deref().map(|date| format!("; highest at {date}")).unwrap_or_default();
    format!("Costs{unit}: now {}{peak}", figure(bands.now.0))
}

fn bands_lines(bands: &BandsAnswer) -> Vec<String> {
    let first = bands.dates.first().map(|at| at.total.intervals.as_slice()).unwrap_or_default();
    let mut cells = vec![["date", "links", "nodes", "expected"].map(str::to_owned).to_vec()];
    add_interval_title(&mut cells, first);
    for at in &bands.dates {
        for band in &at.bands {
            let range = match band.to {
                Some(to) => format!("{} to {}", figure(band.from as f64), figure(to as f64)),
                None => format!(">= {}", figure(band.from as f64)),
            };
            cells.push(amount_row(vec![String::new(), range, figure(band.nodes.0)], &band.cost));
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
        let own = vec![short(&node.name), figure(node.degree as f64), expected];
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
    if !watch.likeliest.is_empty() {
        let names: Vec<String> = watch.likeliest.iter().take(5).map(|name| short(name)).collect();
        lines.extend(paragraph(&format!("Likeliest to be past the highest threshold: {}.", names.join(", "))));
    }
    for class in &watch.classes {
        let range = format!("{} to {} links", figure(class.from as f64), figure(class.to as f64));
        for passing in &class.passing {
            let Some(last) = passing.dates.last() else { continue };
            let widest = last.passed.intervals.last().map(interval_in_words).unwrap_or_default();
            lines.extend(paragraph(&format!(
                "Of {} nodes with {range}, {} are expected to pass {} by {}{widest}.",
                figure(class.nodes as f64),
                figure(last.passed.expected.0),
                figure(passing.threshold as f64),
                last.date
            )));
        }
    }
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
        lines.extend(paragraph(&format!("{}: {}", limit_title(limit), limit.verdict)));
    }
    if let Some((bands, last)) = scenario.bands.as_ref().and_then(|bands| Some((bands, bands.dates.last()?))) {
        let unit = bands.cost_unit.as_deref().map(|unit| format!(" {}", short(unit))).unwrap_or_default();
        lines.extend(paragraph(&format!("Costs at {}: {}{unit}.", last.date, figure(last.total.expected.0))));
    }
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

fn ends(interval: &IntervalAnswer) -> String {
    format!("{} to {}", figure(interval.low.0), figure(interval.high.0))
}

fn interval_in_words(interval: &IntervalAnswer) -> String {
    format!(" ({} % interval {})", percent(interval.level.0), ends(interval))
}

/// A difference with its sign.
fn signed(value: f64) -> String {
    if value < 0.0 { format!("-{}", figure(-value)) } else { format!("+{}", figure(value)) }
}

/// A probability as a percentage; what rounds to certainty and is not certain says so.
fn chance(probability: f64) -> String {
    match 100.0 * probability {
        p if p > 0.0 && p < 0.1 => "<0.1 %".to_owned(),
        p if p > 99.9 && p < 100.0 => ">99.9 %".to_owned(),
        p => format!("{} %", percent((p * 10.0).round() / 1000.0)),
    }
}

fn reached(at: &DateAtAnswer) -> String {
    at.date.as_deref().map_or("-", day).to_owned()
}

fn by_date(at: &DateAtAnswer) -> String {
    at.date.as_ref().map_or("at no date looked at".to_owned(), |date| format!("by {}", day(date)))
}

/// The day of a date, whatever its time.
fn day(date: &str) -> &str {
    date.split('T').next().unwrap_or(date)
}

/// A caller's text on one short line.
fn short(name: &str) -> String {
    let plain: String = name.chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
    match plain.char_indices().nth(NAME_CHARS) {
        Some((end, _)) => format!("{}…", plain.get(..end).unwrap_or_default()),
        None => plain,
    }
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

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn chances_are_never_rounded_to_certainty() {
        for (probability, text) in
            [(0.0, "0 %"), (1e-9, "<0.1 %"), (0.05, "5 %"), (0.1234, "12.3 %"), (0.99999, ">99.9 %"), (1.0, "100 %")]
        {
            assert_eq!(chance(probability), text);
        }
    }

    #[test]
    fn a_callers_name_stays_on_its_line() {
        assert_eq!(short("fan-out\nshards"), "fan-out shards");
        assert_eq!(short(&"ä".repeat(30)).chars().count(), NAME_CHARS + 1);
    }
}

//! A forecast's report.

use super::figures::{Figure, figures};
use super::grid::{Cell, crossed};
use super::growth::growth;
use super::questions::questions;
use super::{Fact, Report, ReportError, Section, fact, makers, newest, reading, shown, subject};
use crate::report::charts::{ForecastChart, Theme, forecast_chart};
use crate::report::csv::percent;
use crate::report::text::figure;
use crate::report::words::{chance, ends};
use crate::service::{ForecastAnswer, ForecastRun, IntervalAnswer, LimitAnswer, TailAnswer};

/// Fewest nodes past a threshold for it to be the headline: of fewer, chance decides.
const HEADLINE_NODES: f64 = 5.0;

/// A kept forecast as a page; `address` is where it is kept.
///
/// # Errors
/// When a chart or the page cannot be made, which is a fault of ours.
pub fn forecast_page(run: &ForecastRun, address: &str, theme: Theme) -> Result<String, ReportError> {
    let mut facts = vec![fact("Made", run.created_at.as_str()), fact("Run", run.id.to_string())];
    facts.extend(newest(&run.answer));
    let subject = subject("Forecast", run.network.as_deref(), run.answer.label.as_deref());
    page(&run.answer, (subject, facts), reading(address, "&part=tail"), theme)
}

/// A forecast that is kept nowhere as a page; `command` makes it again.
///
/// # Errors
/// As [`forecast_page`].
pub fn inline_page(answer: &ForecastAnswer, command: &str, theme: Theme) -> Result<String, ReportError> {
    let form = |form: &str| format!("{command} --format {form}");
    let again = vec![
        fact("All figures, JSON", form("json")),
        fact("A table, CSV", form("csv")),
        fact("This report", form("html")),
    ];
    let facts = newest(answer).into_iter().collect();
    page(answer, (subject("Forecast", None, answer.label.as_deref()), facts), again, theme)
}

fn page(
    answer: &ForecastAnswer,
    (subject, mut facts): (String, Vec<Fact>),
    again: Vec<Fact>,
    theme: Theme,
) -> Result<String, ReportError> {
    facts.extend(makers(&answer.engine, answer.seed, &answer.inputs_digest));
    let (finding, lead) = finding(answer);
    let mut hubs = Section::new("Hubs at each date");
    hubs.figures = courses(answer, theme)?;
    hubs.grids = tails(answer);
    let mut sections = vec![hubs];
    sections.extend(questions(answer, theme)?);
    let mut drivers = growth(&answer.fit, &answer.pools);
    let tail = figures(vec![forecast_chart(answer, ForecastChart::Tail, None, theme)])?;
    drivers.figures = tail.into_iter().map(Figure::on_screen).collect();
    sections.push(drivers);
    sections.retain(|section| !section.is_empty());
    let (warnings, cautions) = (answer.warnings.clone(), answer.cautions.clone());
    Report { theme, subject, finding, lead, facts, sections, warnings, cautions, again }.html()
}

/// How hubs grow: past the threshold of the limit most at risk, and past every threshold.
fn courses(answer: &ForecastAnswer, theme: Theme) -> Result<Vec<Figure>, ReportError> {
    let chart = |threshold| forecast_chart(answer, ForecastChart::Growth, threshold, theme);
    let all = figures(vec![chart(None)])?;
    let Some(limit) = pressing(answer) else { return Ok(all) };
    let mut shown = figures(vec![chart(Some(limit.threshold))])?;
    let others = all.into_iter().filter(|figure| !shown.contains(figure)).map(Figure::on_screen).collect::<Vec<_>>();
    shown.extend(others);
    Ok(shown)
}

/// The limit most at risk.
fn pressing(answer: &ForecastAnswer) -> Option<&LimitAnswer> {
    let at_risk = |limit: &LimitAnswer| if limit.now > limit.max_nodes { 2.0 } else { limit.at_by.crossed.0 };
    answer.limits.iter().max_by(|a, b| at_risk(a).total_cmp(&at_risk(b)))
}

/// The heading, and what else is to be known at a glance.
fn finding(answer: &ForecastAnswer) -> (String, Vec<String>) {
    let tail = tail_finding(answer).unwrap_or_else(|| "A forecast without a date".to_owned());
    match pressing(answer) {
        Some(limit) => (limit_finding(limit), vec![tail]),
        None => (tail, Vec::new()),
    }
}

fn limit_finding(limit: &LimitAnswer) -> String {
    let name = limit.name.as_deref().map(|name| format!("{}: ", shown(name))).unwrap_or_default();
    let (most, threshold) = (figure(limit.max_nodes as f64), figure(limit.threshold as f64));
    if limit.now > limit.max_nodes {
        let now = figure(limit.now as f64);
        return format!("{name}{now} nodes with {threshold} links or more today, over the limit of {most}");
    }
    let crossed = chance(limit.at_by.crossed.0);
    format!("{name}{crossed} chance of more than {most} nodes with {threshold} links or more by {}", limit.by)
}

/// How many nodes will be past the highest threshold that is not up to chance alone.
fn tail_finding(answer: &ForecastAnswer) -> Option<String> {
    let last = answer.forecast.last()?;
    let told = |tail: &&TailAnswer| tail.now.0.min(tail.expected.0) >= HEADLINE_NODES;
    let tail = last.tail.iter().rev().find(told).or_else(|| last.tail.first())?;
    let interval = tail.intervals.last();
    let interval = interval.map(|i| format!(" ({} % interval {})", percent(i.level.0), ends(i))).unwrap_or_default();
    Some(format!(
        "Hubs with {} links or more: {} now, {} expected by {}{interval}",
        figure(tail.threshold as f64),
        figure(tail.now.0),
        figure(tail.expected.0),
        last.date
    ))
}

/// Dates down, thresholds across, all nodes and the largest degree last.
fn tails(answer: &ForecastAnswer) -> Vec<super::Grid> {
    let Some(first) = answer.forecast.first() else { return Vec::new() };
    let level = first.nodes.intervals.last().map(|i| format!(" with its {} % interval", percent(i.level.0)));
    let caption = format!("Nodes with at least so many links: expected{}", level.unwrap_or_default());
    let mut columns: Vec<String> =
        first.tail.iter().map(|tail| format!("≥ {}", figure(tail.threshold as f64))).collect();
    columns.extend(["all nodes", "largest degree (median)"].map(str::to_owned));
    let now = answer.history.last().map_or_else(|| "now".to_owned(), |last| format!("{} (now)", last.as_of));
    let rows: Vec<String> = [now].into_iter().chain(answer.forecast.iter().map(|at| at.date.clone())).collect();
    let cell = |row: usize, column: usize| {
        let Some(at) = answer.forecast.get(row.saturating_sub(1)) else { return Cell::default() };
        let (now, middle, intervals) = match at.tail.get(column) {
            Some(tail) => (tail.now, tail.expected, &tail.intervals),
            None if column == at.tail.len() => (at.nodes.now, at.nodes.expected, &at.nodes.intervals),
            None => (at.largest_degree.now, at.largest_degree.median, &at.largest_degree.intervals),
        };
        if row == 0 { figure(now.0).into() } else { with_interval(figure(middle.0), intervals) }
    };
    crossed(&caption, ("date", &rows), ("links", &columns), &cell)
}

/// A figure with its widest interval.
pub fn with_interval(main: String, intervals: &[IntervalAnswer]) -> Cell {
    Cell::new(main, intervals.last().map(ends).unwrap_or_default())
}

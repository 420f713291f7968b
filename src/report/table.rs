//! A forecast as a table for a planner: prose breaks at a hundred columns, rows are as wide as their figures.

use super::csv::percent;
use super::questions_table::question_lines;
use super::text::{figure, wrap};
use crate::service::{
    AttachmentModel, CountAnswer, DegreeAnswer, EvidenceKind, FitReport, ForecastAnswer, IntervalAnswer, TailAnswer,
};

/// Widest line of prose.
const WIDTH: usize = 100;
/// Most intervals that fit on a line; of more, the narrowest and the widest are shown.
const MOST_INTERVALS: usize = 2;

/// The mix in plain words, the forecast, what else was asked, then every warning and caution.
pub fn forecast_table(answer: &ForecastAnswer) -> String {
    let mut lines = Vec::new();
    lines.extend(wrap(&mix_in_words(&answer.fit), WIDTH, ""));
    lines.push(String::new());
    lines.extend(rows(answer));
    lines.extend(question_lines(answer));
    lines.push(String::new());
    for warning in &answer.warnings {
        lines.extend(wrap(&format!("Warning ({}): {}", warning.code, warning.detail), WIDTH, "  "));
    }
    for caution in &answer.cautions {
        lines.extend(wrap(&format!("Caution: {caution}"), WIDTH, "  "));
    }
    let origin = format!("{}, seed {}, inputs {}", answer.engine, answer.seed, answer.inputs_digest);
    lines.push(origin);
    lines.join("\n") + "\n"
}

/// What the fit says, in a sentence or two.
pub fn mix_in_words(fit: &FitReport) -> String {
    let share = fit.preferential_share;
    let percent = |value: f64| format!("{:.1} %", value * 100.0);
    let interval = match (share.low, share.high, share.level) {
        (Some(low), Some(high), Some(level)) => {
            format!(" ({} % interval {} to {})", super::csv::percent(level.0), percent(low.0), percent(high.0))
        }
        _ => String::new(),
    };
    // One of the ends is still an estimate when the data leave room beside it.
    let with_share = |law: &str| match interval.as_str() {
        "" => law.to_owned(),
        _ => format!("{law} In proportion: {}{interval}.", percent(share.estimate.0)),
    };
    let mix = match fit.model {
        AttachmentModel::Uniform => with_share("Links land on any node alike, however many it has."),
        AttachmentModel::Preferential => with_share("Links land on nodes in proportion to the links they have."),
        AttachmentModel::Mix => format!(
            "{}{interval} of links land in proportion to the links a node has, the rest on any node alike.",
            percent(share.estimate.0)
        ),
        AttachmentModel::Power | AttachmentModel::Dormancy | AttachmentModel::GrowthVariance => {
            format!("{} Preferential share {}{interval}.", fit.verdict, percent(share.estimate.0))
        }
    };
    let evidence = match fit.evidence {
        EvidenceKind::Given => "The mix was given, not fitted.",
        EvidenceKind::OneSnapshot => "Read from one snapshot, as if the network had always grown this way.",
        EvidenceKind::SuccessiveSnapshots => "Read from what changed between snapshots.",
        EvidenceKind::Transitions => "Read from each node's degree before and after.",
        EvidenceKind::LinkEvents => "Read from each landing link.",
    };
    format!("{mix} {evidence}")
}

fn rows(answer: &ForecastAnswer) -> Vec<String> {
    let shown = shown_intervals(answer);
    let mut cells = vec![header(answer, &shown)];
    for at in &answer.forecast {
        let mut date = at.date.as_str();
        for tail in &at.tail {
            cells.push(tail_row(date, tail, &shown));
            date = "";
        }
        cells.push(count_row(date, "all nodes", &at.nodes, &shown));
        cells.push(degree_row("largest degree", &at.largest_degree, &shown));
    }
    align(&cells)
}

/// Places of the intervals to show.
fn shown_intervals(answer: &ForecastAnswer) -> Vec<usize> {
    let levels = answer.forecast.first().map_or(0, |at| at.nodes.intervals.len());
    if levels <= MOST_INTERVALS { (0..levels).collect() } else { vec![0, levels - 1] }
}

fn header(answer: &ForecastAnswer, shown: &[usize]) -> Vec<String> {
    let mut cells = ["date", "hubs: links >=", "now", "expected", "median"].map(str::to_owned).to_vec();
    let levels = answer.forecast.first().map(|at| at.nodes.intervals.as_slice()).unwrap_or_default();
    cells.extend(shown.iter().filter_map(|&i| levels.get(i)).map(|i| format!("{} % interval", percent(i.level.0))));
    cells
}

fn tail_row(date: &str, tail: &TailAnswer, shown: &[usize]) -> Vec<String> {
    let name = figure(tail.threshold as f64);
    let figures = [tail.now.0, tail.expected.0, tail.median.0].map(figure);
    row(date, &name, figures, &tail.intervals, shown)
}

fn count_row(date: &str, name: &str, count: &CountAnswer, shown: &[usize]) -> Vec<String> {
    let figures = [count.now.0, count.expected.0, count.median.0].map(figure);
    row(date, name, figures, &count.intervals, shown)
}

fn degree_row(name: &str, degree: &DegreeAnswer, shown: &[usize]) -> Vec<String> {
    let figures = [figure(degree.now.0), "-".to_owned(), figure(degree.median.0)];
    row("", name, figures, &degree.intervals, shown)
}

fn row(date: &str, name: &str, figures: [String; 3], intervals: &[IntervalAnswer], shown: &[usize]) -> Vec<String> {
    let mut cells = vec![date.to_owned(), name.to_owned()];
    cells.extend(figures);
    let interval = |i: &IntervalAnswer| format!("{} to {}", figure(i.low.0), figure(i.high.0));
    cells.extend(shown.iter().map(|&i| intervals.get(i).map(interval).unwrap_or_default()));
    cells
}

/// Pads cells to their column's width: the first to the left, figures to the right.
pub fn align(cells: &[Vec<String>]) -> Vec<String> {
    let columns = cells.iter().map(Vec::len).max().unwrap_or(0);
    let width = |column: usize| {
        cells.iter().filter_map(|row| row.get(column)).map(|cell| cell.chars().count()).max().unwrap_or(0)
    };
    let widths: Vec<usize> = (0..columns).map(width).collect();
    let pad = |(i, cell): (usize, &String)| {
        let width = widths.get(i).copied().unwrap_or(0);
        if i == 0 { format!("{cell:<width$}") } else { format!("{cell:>width$}") }
    };
    cells
        .iter()
        .map(|row| row.iter().enumerate().map(pad).collect::<Vec<_>>().join("  ").trim_end().to_owned())
        .collect()
}

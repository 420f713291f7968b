//! How past forecasts did: outcomes inside intervals, errors by periods ahead.

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, Frame, Letters, Shape, picture};
use super::colours::{Colour, MOST_SERIES};
use super::course::picked;
use super::panel::{Bar, Label, Panel, Room};
use super::words::{NAME, clean, share};
use super::{Chart, ChartError, Theme};
use crate::report::csv::percent;
use crate::report::text::figure;
use crate::service::{BacktestRun, ScoreAnswer};

/// Units between two horizons' bars at one level.
const ASIDE: f64 = 8.0;
const LEFT: Room = Room { left: 70.0, right: 330.0, top: 122.0, bottom: 432.0 };
const RIGHT: Room = Room { left: 530.0, right: 800.0, top: 122.0, bottom: 432.0 };

/// Shares of outcomes inside intervals beside the shares aimed at, and errors beside the best plain trend's.
///
/// # Errors
/// When no forecast was scored.
pub(super) fn calibration(run: &BacktestRun, theme: Theme) -> Result<Chart, ChartError> {
    let (rows, rates) = match together(&run.expected) {
        rows if rows.is_empty() => (together(&run.given), "given the arrivals that came"),
        rows => (rows, "by the arrivals to be expected then"),
    };
    if rows.is_empty() {
        let detail = "no past forecast was scored; a backtest needs more snapshots or lower thresholds";
        return Err(ChartError::Absent(detail.to_owned()));
    }
    let described = rows.iter().map(|row| described(row)).collect::<Vec<_>>();
    let frame = Frame {
        title: title(&rows),
        key: format!(
            "{}. Forecasts from {} past dates, {rates}; tails of 5 nodes or more. Bars: 90 % intervals.",
            clean(&run.network, NAME),
            run.origins.len()
        ),
        caution:
            "Outcomes of one date move together, so shares scatter more than their bars say. What held in the past \
                  need not hold; where a failure could harm people, your own engineering practice comes first."
                .to_owned(),
        description: format!("Calibration and errors of past forecasts. {}", described.join(" ")),
    };
    picture(theme, frame, |canvas| {
        coverage(canvas, &rows)?;
        errors(canvas, &rows)
    })
}

/// The rows of all thresholds together that scored anything, nearest first.
fn together(rows: &[ScoreAnswer]) -> Vec<&ScoreAnswer> {
    rows.iter().filter(|row| row.threshold.is_none() && row.cases > 0).collect()
}

fn title(rows: &[&ScoreAnswer]) -> String {
    let widest = rows.iter().filter_map(|row| row.coverage.last()).collect::<Vec<_>>();
    let (inside, cases) = widest.iter().fold((0_u64, 0_u64), |(inside, cases), row| {
        (inside.saturating_add(row.inside), cases.saturating_add(row.cases))
    });
    let held = widest.first().map(|row| {
        let (level, of) = (percent(row.level.0), figure(cases as f64));
        format!(
            "{level} % intervals held {} of {of} outcomes ({})",
            figure(inside as f64),
            share(inside as f64 / cases.max(1) as f64)
        )
    });
    let against =
        rows.first().and_then(|row| row.skill.map(|skill| (row.periods_ahead, skill.0))).map(|(ahead, skill)| {
            let side = if skill >= 0.0 { "below" } else { "above" };
            let ahead = if ahead == 1 { "one period".to_owned() } else { format!("{ahead} periods") };
            format!("errors {ahead} ahead were {} {side} the best plain trend's", share(skill.abs()))
        });
    let parts: Vec<String> = held.into_iter().chain(against).collect();
    if parts.is_empty() { "Past forecasts beside what came".to_owned() } else { parts.join("; ") }
}

fn described(row: &ScoreAnswer) -> String {
    let covered = row.coverage.iter().map(|at| {
        let (level, share) = (percent(at.level.0), share(at.share.0));
        format!("{} of {} outcomes ({share}) inside {level} % intervals", at.inside, at.cases)
    });
    let trend = trend_error(row).map(|error| format!(", best plain trend {}", figure(error))).unwrap_or_default();
    format!(
        "{} ahead: {}; mean log error {}{trend}.",
        periods(row),
        covered.collect::<Vec<_>>().join(", "),
        figure(row.pooled.errors.mean_log_error.0)
    )
}

fn coverage(canvas: &Canvas, rows: &[&ScoreAnswer]) -> Drawn {
    let panel = Panel::new(canvas, Axis::shares("Level of the interval"), Axis::shares("Outcomes inside"), LEFT)?;
    panel.line(&[(0.0, 0.0), (1.0, 1.0)], Colour::Muted, 1.4, Dash::Short)?;
    let shown = picked(rows, MOST_SERIES);
    let middle = (shown.len() as f64 - 1.0) / 2.0;
    let mut labels = Vec::new();
    for (series, row) in shown.iter().enumerate() {
        let (colour, shape, aside) = (Colour::Series(series), Shape::of(series), ASIDE * (series as f64 - middle));
        for at in &row.coverage {
            panel.bar(Bar { x: at.level.0, low: at.low.0, high: at.high.0 }, aside, colour, false)?;
            panel.markers(&[(at.level.0, at.share.0)], aside, shape, colour, 4.0)?;
        }
        let last = row.coverage.last().map(|at| at.share.0);
        labels.extend(last.map(|at| Label {
            at,
            text: format!("{} ahead", periods(row)),
            mark: Some((colour, shape)),
        }));
    }
    labels.push(Label { at: 0.0, text: "dashed line: as aimed at".to_owned(), mark: None });
    panel.labels_within(&labels, RIGHT.left - 60.0)
}

fn errors(canvas: &Canvas, rows: &[&ScoreAnswer]) -> Drawn {
    let ahead = |row: &ScoreAnswer| f64::from(row.periods_ahead);
    let pooled: Vec<(f64, f64)> = rows.iter().map(|row| (ahead(row), row.pooled.errors.mean_log_error.0)).collect();
    let trend: Vec<(f64, f64)> = rows.iter().filter_map(|row| Some((ahead(row), trend_error(row)?))).collect();
    let steps: Vec<f64> = pooled.iter().map(|(ahead, _)| *ahead).collect();
    let values: Vec<f64> = pooled.iter().chain(&trend).map(|(_, error)| *error).collect();
    let up = Axis::amounts(&values, "Mean |ln(forecast ÷ observed)|");
    let panel = Panel::new(canvas, Axis::steps(&steps, "Periods ahead"), up, RIGHT)?;
    let courses = [
        (&pooled, "forecast", Colour::Series(0), Shape::Circle, Dash::Solid),
        (&trend, "best plain trend", Colour::Ink, Shape::Square, Dash::Long),
    ];
    let mut labels = Vec::new();
    for (points, name, colour, shape, dash) in courses {
        panel.line(points, colour, 2.0, dash)?;
        panel.markers(points, 0.0, shape, colour, 4.0)?;
        labels.extend(points.last().map(|(_, at)| Label {
            at: *at,
            text: name.to_owned(),
            mark: Some((colour, shape)),
        }));
    }
    if trend.is_empty() {
        canvas.text((RIGHT.left, RIGHT.bottom + 54.0), "No plain trend forecast every case.", Letters::NOTE)?;
    }
    panel.labels(&labels)
}

/// The mean log error of the best plain trend.
fn trend_error(row: &ScoreAnswer) -> Option<f64> {
    let best = row.best_trend.as_deref()?;
    row.members.iter().find(|member| member.member == best).map(|member| member.errors.mean_log_error.0)
}

fn periods(row: &ScoreAnswer) -> String {
    if row.periods_ahead == 1 { "1 period".to_owned() } else { format!("{} periods", row.periods_ahead) }
}

//! A backtest's report.

use super::figures::figures;
use super::grid::{Cell, Grid, Row};
use super::{Fact, Report, ReportError, Section, fact, reading, subject};
use crate::report::charts::{Theme, backtest_chart};
use crate::report::csv::percent;
use crate::report::text::figure;
use crate::service::{BacktestRun, ScoreAnswer};

/// A finished backtest as a page; `address` is where it is kept.
///
/// # Errors
/// When a chart or the page cannot be made, which is a fault of ours.
pub fn backtest_page(run: &BacktestRun, address: &str, theme: Theme) -> Result<String, ReportError> {
    let mut overall = Section::new("How forecasts did, all thresholds together");
    overall.figures = figures(vec![backtest_chart(run, theme)])?;
    let is_overall = |row: &&ScoreAnswer| row.threshold.is_none();
    let (given, expected) = ("Given the arrivals and links that came", "By the arrivals and links expected then");
    for (caption, table) in [(given, &run.given), (expected, &run.expected)] {
        overall.grids.extend(scores(run, caption, "periods ahead", table.iter().filter(is_overall), |row| {
            row.periods_ahead.to_string()
        }));
    }
    let mut each = Section::new("Threshold by threshold, one period ahead");
    for (caption, table) in [(given, &run.given), (expected, &run.expected)] {
        let nearest = table.iter().map(|row| row.periods_ahead).min();
        let rows = table.iter().filter(|row| row.threshold.is_some() && Some(row.periods_ahead) == nearest);
        each.grids.extend(scores(run, caption, "links", rows, |row| {
            row.threshold.map(|threshold| figure(threshold as f64)).unwrap_or_default()
        }));
    }
    let mut weights = Section::new("How members were weighed at the newest origin");
    weights.paragraphs = run.pools.iter().map(|pool| pool.detail.clone()).collect();
    let mut sections = vec![overall, each, weights];
    sections.retain(|section| !section.is_empty());
    Report {
        theme,
        subject: subject("Backtest", Some(&run.network), None),
        finding: finding(run),
        lead: vec![run.verdict.clone()],
        facts: facts(run),
        sections,
        warnings: Vec::new(),
        cautions: run.cautions.clone(),
        again: reading(address, ""),
    }
    .html()
}

/// How far the pool missed at the nearest horizon, beside the best plain trend.
fn finding(run: &BacktestRun) -> String {
    let overall = |rows: &[ScoreAnswer]| rows.iter().find(|row| row.threshold.is_none()).cloned();
    let (row, hindsight) = match (overall(&run.expected), overall(&run.given)) {
        (Some(row), _) => (row, ""),
        (None, Some(row)) => (row, ", given the arrivals that came"),
        (None, None) => return "Nothing was scored".to_owned(),
    };
    let error = |error: f64| format!("{:.1} %", 100.0 * error);
    let trend = row.best_trend.as_ref().and_then(|best| row.members.iter().find(|member| member.member == *best));
    let trend = trend.map(|trend| format!(", the best plain trend by {}", error(trend.errors.mean_log_error.0)));
    format!(
        "Past forecasts missed by {} {} ahead{}{hindsight}",
        error(row.pooled.errors.mean_log_error.0),
        if row.periods_ahead == 1 { "one period".to_owned() } else { format!("{} periods", row.periods_ahead) },
        trend.unwrap_or_default()
    )
}

fn facts(run: &BacktestRun) -> Vec<Fact> {
    let span = |dates: &[String]| match (dates.first(), dates.last()) {
        (Some(first), Some(last)) => format!("{}, {first} to {last}", dates.len()),
        _ => "0".to_owned(),
    };
    vec![
        fact("Made", run.created_at.as_str()),
        fact("Backtest", run.id.to_string()),
        fact("Snapshots", span(&run.snapshots)),
        fact("Forecast from", span(&run.origins)),
        fact("Engine", run.engine.as_str()),
    ]
}

/// A table of scores, none where nothing was scored.
fn scores<'a>(
    run: &BacktestRun,
    caption: &str,
    corner: &str,
    rows: impl Iterator<Item = &'a ScoreAnswer>,
    name: impl Fn(&ScoreAnswer) -> String,
) -> Option<Grid> {
    let mut columns: Vec<String> = ["error", "best trend's", "skill", "CRPS, nodes"].map(str::to_owned).into();
    columns.extend(run.levels.iter().map(|level| format!("inside {} %", percent(level.0))));
    let row = |row: &ScoreAnswer| {
        let share = |share: f64| format!("{:.1} %", 100.0 * share);
        let trend = row.members.iter().find(|member| Some(&member.member) == row.best_trend.as_ref());
        let trend = trend.map(|trend| Cell::new(share(trend.errors.mean_log_error.0), trend.member.replace('_', " ")));
        let cases = format!("{} {}", row.cases, if row.cases == 1 { "case" } else { "cases" });
        let mut cells = vec![share(row.pooled.errors.mean_log_error.0).into(), trend.unwrap_or_default()];
        cells.push(row.skill.map(|skill| format!("{:.2}", skill.0)).unwrap_or_default().into());
        cells.push(figure(row.pooled.crps.0).into());
        cells.extend(run.levels.iter().map(|level| {
            let inside = row.coverage.iter().find(|at| at.level == *level);
            let ends =
                |at: &crate::service::CoverageRow| format!("{:.0} to {:.0} %", 100.0 * at.low.0, 100.0 * at.high.0);
            inside.map(|at| Cell::new(share(at.share.0), ends(at))).unwrap_or_default()
        }));
        Row::new(Cell::new(name(row), cases), cells)
    };
    let rows: Vec<Row> = rows.map(row).collect();
    let caption =
        format!("{caption}: mean relative error of the pooled forecast, and shares of outcomes inside its intervals");
    (!rows.is_empty()).then(|| Grid { caption, corner: corner.to_owned(), columns, rows })
}

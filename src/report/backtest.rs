//! A backtest as CSV (RFC 4180).

use super::csv::{percent, text, writer};
use crate::service::{BacktestRun, ErrorsAnswer, ScoreAnswer};

/// The tables in long form: one row a table, periods ahead, threshold (blank: all of them) and member; the rows of the pool have
/// its CRPS, coverage and skill; the cautions on the first row.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
pub fn backtest_csv(run: &BacktestRun) -> Result<String, csv::Error> {
    let mut writer = writer();
    let fixed =
        ["table", "periods_ahead", "threshold", "member", "cases", "mean_log_error", "mean_absolute_error", "crps"];
    let mut header: Vec<String> = fixed.map(str::to_owned).to_vec();
    for level in &run.levels {
        let percent = percent(level.0);
        header.extend(["inside", "share", "low", "high"].map(|column| format!("{column}_{percent}")));
    }
    header.extend(["best_trend", "skill", "crps_skill", "cautions"].map(str::to_owned));
    writer.write_record(&header)?;
    let mut cautions = run.cautions.join(" ");
    for (table, rows) in [("given", &run.given), ("expected", &run.expected)] {
        for row in rows {
            let mut cells = leading(table, row, "pool", &row.pooled.errors);
            cells.push(row.pooled.crps.0.to_string());
            for level in &run.levels {
                match row.coverage.iter().find(|at| at.level == *level) {
                    Some(at) => {
                        cells.push(at.inside.to_string());
                        cells.extend([at.share, at.low, at.high].map(|value| value.0.to_string()));
                    }
                    None => cells.extend([const { String::new() }; 4]),
                }
            }
            cells.push(row.best_trend.clone().unwrap_or_default());
            cells.extend([row.skill, row.crps_skill].map(|skill| skill.map(|s| s.0.to_string()).unwrap_or_default()));
            cells.push(std::mem::take(&mut cautions));
            writer.write_record(&cells)?;
            for member in &row.members {
                let mut cells = leading(table, row, &member.member, &member.errors);
                cells.resize(header.len(), String::new());
                writer.write_record(&cells)?;
            }
        }
    }
    text(writer)
}

fn leading(table: &str, row: &ScoreAnswer, member: &str, errors: &ErrorsAnswer) -> Vec<String> {
    let threshold = row.threshold.map(|threshold| threshold.to_string()).unwrap_or_default();
    let mut cells = vec![table.to_owned(), row.periods_ahead.to_string(), threshold, member.to_owned()];
    cells.push(row.cases.to_string());
    cells.extend([errors.mean_log_error, errors.mean_absolute_error].map(|value| value.0.to_string()));
    cells
}

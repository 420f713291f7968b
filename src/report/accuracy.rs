//! An accuracy report as CSV (RFC 4180).

use super::csv::{percent, text, writer};
use crate::service::AccuracyAnswer;

/// The report in long form: one row a forecast, date and threshold; the cautions on the first row.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
pub fn accuracy_csv(report: &AccuracyAnswer) -> Result<String, csv::Error> {
    let rows = || report.forecasts.iter().flat_map(|forecast| forecast.dates.iter().map(move |date| (forecast, date)));
    let mut levels: Vec<f64> = rows()
        .flat_map(|(_, date)| date.outcome.tail.iter().flat_map(|row| &row.outcome.intervals))
        .map(|interval| interval.level.0)
        .collect();
    levels.sort_by(f64::total_cmp);
    levels.dedup();
    let mut writer = writer();
    let fixed = [
        "forecast",
        "origin",
        "as_of",
        "days_ahead",
        "threshold",
        "observed",
        "expected",
        "median",
        "log_error",
        "weighted_interval_score",
    ];
    let mut header: Vec<String> = fixed.map(str::to_owned).to_vec();
    for level in &levels {
        header.extend(["low", "high", "inside"].map(|end| format!("{end}_{}", percent(*level))));
    }
    header.extend(["evidence_corrected_at", "warnings", "cautions"].map(str::to_owned));
    writer.write_record(&header)?;
    let warnings = report.warnings.iter().map(|warning| warning.code.as_str()).collect::<Vec<_>>().join(" ");
    let mut cautions = report.cautions.join(" ");
    for (forecast, date) in rows() {
        for row in &date.outcome.tail {
            let outcome = &row.outcome;
            let mut cells = vec![forecast.id.to_string(), forecast.origin.clone(), date.as_of.clone()];
            cells.extend([date.outcome.days_ahead.0.to_string(), row.threshold.to_string()]);
            cells.extend([outcome.observed.0, outcome.expected.0, outcome.median.0].map(|value| value.to_string()));
            cells.extend([outcome.log_error.0, outcome.weighted_interval_score.0].map(|value| value.to_string()));
            for level in &levels {
                // Forecasts by an earlier plan may have other levels.
                match outcome.intervals.iter().find(|interval| interval.level.0 == *level) {
                    Some(at) => cells.extend([at.low.0.to_string(), at.high.0.to_string(), at.inside.to_string()]),
                    None => cells.extend([const { String::new() }; 3]),
                }
            }
            let corrected = forecast.evidence_corrected_at.clone().unwrap_or_default();
            cells.extend([corrected, warnings.clone(), std::mem::take(&mut cautions)]);
            writer.write_record(&cells)?;
        }
    }
    text(writer)
}

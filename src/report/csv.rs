//! Answers as CSV (RFC 4180), long form: one row a date and threshold.

use csv::{Terminator, WriterBuilder};

use crate::service::{FitAnswer, ForecastAnswer, IntervalAnswer};

/// A forecast: one row a date and threshold, intervals as columns, the cautions on the first row of each date.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
pub fn forecast_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut writer = writer();
    let levels = answer.forecast.first().map(|at| at.nodes.intervals.as_slice()).unwrap_or_default();
    let mut header: Vec<String> = ["date", "threshold", "now", "expected", "median"].map(str::to_owned).to_vec();
    for IntervalAnswer { level, .. } in levels {
        let percent = percent(level.0);
        header.extend([format!("low_{percent}"), format!("high_{percent}")]);
    }
    header.extend(["warnings", "cautions"].map(str::to_owned));
    writer.write_record(&header)?;
    let warnings = answer.warnings.iter().map(|warning| warning.code.as_str()).collect::<Vec<_>>().join(" ");
    let cautions = answer.cautions.join(" ");
    for at in &answer.forecast {
        for (i, tail) in at.tail.iter().enumerate() {
            let mut row = vec![at.date.clone(), tail.threshold.to_string()];
            row.extend([tail.now.0, tail.expected.0, tail.median.0].map(|value| value.to_string()));
            row.extend(tail.intervals.iter().flat_map(|i| [i.low.0.to_string(), i.high.0.to_string()]));
            row.extend([warnings.clone(), if i == 0 { cautions.clone() } else { String::new() }]);
            writer.write_record(&row)?;
        }
    }
    text(writer)
}

/// A fit's tail: one row a degree, the cautions on the first row.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
pub fn fit_csv(answer: &FitAnswer) -> Result<String, csv::Error> {
    let mut writer = writer();
    writer.write_record(["degree", "observed", "fitted", "warnings", "cautions"])?;
    let warnings = answer.warnings.iter().map(|warning| warning.code.as_str()).collect::<Vec<_>>().join(" ");
    for (i, point) in answer.tail.iter().enumerate() {
        writer.write_record([
            point.degree.to_string(),
            point.observed.to_string(),
            point.fitted.0.to_string(),
            warnings.clone(),
            if i == 0 { answer.cautions.join(" ") } else { String::new() },
        ])?;
    }
    text(writer)
}

/// A level as the percentage in a column's name: 0.9 is 90, 0.995 is 99.5.
pub fn percent(level: f64) -> String {
    // Ten decimals are beyond any level that is meant, and short of the noise that times 100 adds.
    let text = format!("{:.10}", level * 100.0);
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

pub(super) fn writer() -> csv::Writer<Vec<u8>> {
    WriterBuilder::new().terminator(Terminator::CRLF).from_writer(Vec::new())
}

pub(super) fn text(writer: csv::Writer<Vec<u8>>) -> Result<String, csv::Error> {
    let bytes = writer.into_inner().map_err(|error| csv::Error::from(error.into_error()))?;
    String::from_utf8(bytes).map_err(|error| csv::Error::from(std::io::Error::other(error)))
}

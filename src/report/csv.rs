//! Answers as CSV (RFC 4180), long form: one row a date and threshold.

use clap::ValueEnum;
use csv::{Terminator, WriterBuilder};
use utoipa::ToSchema;

use super::questions_csv::{bands_csv, limits_csv, next_hubs_csv, scenarios_csv, watch_csv};
use crate::service::{FitAnswer, ForecastAnswer, IntervalAnswer};

/// What of a forecast a table tells.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ToSchema, ValueEnum)]
#[schema(rename_all = "snake_case")]
#[value(rename_all = "snake_case")]
pub enum ForecastPart {
    /// How many hubs there will be: one row a date and threshold.
    Tail,
    /// Limits: one row a limit and date.
    Limits,
    /// Costs by degree: one row a date and band.
    Bands,
    /// Watched nodes and classes: one row each, date, threshold and quantity.
    Watch,
    /// The largest nodes: one row a date and rank.
    NextHubs,
    /// What-ifs: one row each, date and threshold.
    Scenarios,
}

impl ForecastPart {
    /// Every part, the default first.
    pub const ALL: [Self; 6] = [Self::Tail, Self::Limits, Self::Bands, Self::Watch, Self::NextHubs, Self::Scenarios];

    /// Its name.
    pub fn name(self) -> &'static str {
        match self {
            Self::Tail => "tail",
            Self::Limits => "limits",
            Self::Bands => "bands",
            Self::Watch => "watch",
            Self::NextHubs => "next_hubs",
            Self::Scenarios => "scenarios",
        }
    }
}

/// A part of a forecast; without rows where it was not asked for.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
pub fn part_csv(answer: &ForecastAnswer, part: ForecastPart) -> Result<String, csv::Error> {
    match part {
        ForecastPart::Tail => forecast_csv(answer),
        ForecastPart::Limits => limits_csv(answer),
        ForecastPart::Bands => bands_csv(answer),
        ForecastPart::Watch => watch_csv(answer),
        ForecastPart::NextHubs => next_hubs_csv(answer),
        ForecastPart::Scenarios => scenarios_csv(answer),
    }
}

/// A forecast: one row a date and threshold, intervals as columns, the cautions on the first row of each date.
///
/// # Errors
/// When a row cannot be written, which memory alone can cause.
fn forecast_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
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

//! Charts of answers, as SVG (W3C SVG 1.1) that any `<img src>` shows.

mod attachment;
mod axis;
mod calendar;
mod calibration;
mod canvas;
mod colours;
mod course;
mod growth;
mod panel;
mod scenarios;
mod tail;
mod words;

use clap::ValueEnum;
use thiserror::Error;
use utoipa::ToSchema;

use crate::service::{BacktestRun, FitAnswer, ForecastAnswer};

/// What a reader of a forecast must bear in mind.
const CAUTION: &str = "Intervals aim at holding the share of outcomes that they name, and only while growth goes on as described. \
                       Where a capacity failure could harm people, your own engineering practice and its margins come first.";

/// The colours of a chart.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, ToSchema, ValueEnum)]
#[schema(rename_all = "snake_case")]
#[value(rename_all = "snake_case")]
pub enum Theme {
    /// As the reader's device prefers.
    #[default]
    Auto,
    /// On white.
    Light,
    /// On black.
    Dark,
}

/// What of a forecast a chart shows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, ToSchema, ValueEnum)]
#[schema(rename_all = "snake_case")]
#[value(rename_all = "snake_case")]
pub enum ForecastChart {
    /// Hubs over time with intervals, history, limits and crossing dates.
    #[default]
    Growth,
    /// Observed, fitted and forecast tail on log axes.
    Tail,
    /// What-ifs beside the forecast as it stands.
    Scenarios,
}

/// What of a fit a chart shows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, ToSchema, ValueEnum)]
#[schema(rename_all = "snake_case")]
#[value(rename_all = "snake_case")]
pub enum FitChart {
    /// Observed and fitted tail on log axes.
    #[default]
    Tail,
    /// How strongly nodes of each degree attract links.
    Attachment,
}

/// A chart.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Chart {
    /// The finding, in words.
    pub title: String,
    /// What is drawn, in words: the text alternative.
    pub description: String,
    /// The picture, title and description within.
    pub svg: String,
}

/// Why there is no chart.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum ChartError {
    /// The answer has nothing of what is to be shown; says what would.
    #[error("{0}")]
    Absent(String),
    /// Drawing failed.
    #[error("drawing a chart: {0}")]
    Drawing(String),
}

/// A chart of a forecast; of the growth of hubs past `threshold` alone where one is given.
///
/// # Errors
/// When the answer has nothing of the kind.
pub fn forecast_chart(
    answer: &ForecastAnswer,
    chart: ForecastChart,
    threshold: Option<u64>,
    theme: Theme,
) -> Result<Chart, ChartError> {
    match chart {
        ForecastChart::Growth => growth::growth(answer, threshold, theme),
        ForecastChart::Tail => tail::forecast_tail(answer, threshold, theme),
        ForecastChart::Scenarios => scenarios::scenarios(answer, threshold, theme),
    }
}

/// A chart of a fit.
///
/// # Errors
/// When the answer has nothing of the kind.
pub fn fit_chart(answer: &FitAnswer, chart: FitChart, theme: Theme) -> Result<Chart, ChartError> {
    match chart {
        FitChart::Tail => tail::fitted_tail(answer, theme),
        FitChart::Attachment => attachment::attachment(answer, theme),
    }
}

/// How often intervals of past forecasts held what came, and their errors, by horizon.
///
/// # Errors
/// When the backtest has no case.
pub fn backtest_chart(run: &BacktestRun, theme: Theme) -> Result<Chart, ChartError> {
    calibration::calibration(run, theme)
}

//! Answers as tables and pages.

mod accuracy;
mod backtest;
mod charts;
mod csv;
mod gauges;
mod page;
mod policy;
mod questions_csv;
mod questions_table;
mod rows;
mod table;
mod text;
mod web;
mod words;

pub use accuracy::accuracy_csv;
pub use backtest::backtest_csv;
pub use charts::{Chart, ChartError, FitChart, ForecastChart, Theme, backtest_chart, fit_chart, forecast_chart};
pub use csv::{ForecastPart, fit_csv, part_csv};
pub use gauges::gauges_text;
pub use page::{ReportError, backtest_page, comparison_page, fit_page, forecast_page, inline_page};
pub use policy::content_policy;
pub use rows::{degree_counts_csv, transitions_csv};
pub use table::{align, forecast_table, mix_in_words};
pub use text::{figure, readable, wrap};
pub use web::{WebFile, web_files};

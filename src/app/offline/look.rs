//! How a forecast on the command line is to look.

use clap::Args;

use crate::app::{OutputFormat, Stop};
use crate::report::{ForecastChart, ForecastPart, Theme};

/// What of the answer a form tells.
#[derive(Debug, Args)]
pub struct Look {
    /// What of the answer --format csv tells; tail when left out
    #[arg(long, value_enum, value_name = "PART")]
    part: Option<ForecastPart>,
    /// Which chart --format svg draws; growth when left out
    #[arg(long, value_enum, value_name = "CHART")]
    chart: Option<ForecastChart>,
    /// The one threshold that the chart is about
    #[arg(long, value_name = "LINKS", value_parser = clap::value_parser!(u64).range(1..))]
    threshold: Option<u64>,
    /// Colours of --format svg and html; auto when left out
    #[arg(long, value_enum, value_name = "THEME")]
    theme: Option<Theme>,
}

/// A form with what it is to tell.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Form {
    /// For people.
    Table,
    /// All of the answer.
    Json,
    /// One table.
    Csv(ForecastPart),
    /// One chart, of one threshold where one is given.
    Svg(ForecastChart, Option<u64>, Theme),
    /// A report.
    Html(Theme),
}

impl Look {
    /// The form with these options; those that do nothing in it are refused.
    pub fn of(&self, format: OutputFormat) -> Result<Form, Stop> {
        use OutputFormat as F;
        let given = [
            ("--part", self.part.is_some(), &[F::Csv][..], "csv"),
            ("--chart", self.chart.is_some(), &[F::Svg], "svg"),
            ("--threshold", self.threshold.is_some(), &[F::Svg], "svg"),
            ("--theme", self.theme.is_some(), &[F::Svg, F::Html], "svg or html"),
        ];
        let unused = given.iter().filter(|(_, given, forms, _)| *given && !forms.contains(&format));
        let refusals: Vec<String> =
            unused.map(|(option, _, _, forms)| format!("tailcast: {option} goes with --format {forms}\n")).collect();
        if !refusals.is_empty() {
            return Err(Stop::Refused(refusals.concat()));
        }
        let theme = self.theme.unwrap_or_default();
        Ok(match format {
            F::Table => Form::Table,
            F::Json => Form::Json,
            F::Csv => Form::Csv(self.part.unwrap_or(ForecastPart::Tail)),
            F::Svg => Form::Svg(self.chart.unwrap_or_default(), self.threshold, theme),
            F::Html => Form::Html(theme),
        })
    }
}

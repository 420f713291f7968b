//! `forecast`: the same request body and the same answer as over HTTP, with no server and no database.

mod completion;
mod look;

use std::fmt::Write as _;
use std::io::Read;
use std::path::Path;

use super::{Stop, print};
use crate::api::{self, ApiError, Problem};
use crate::config::Config;
use crate::report::{self, ChartError};
use crate::service::{self, ServiceError};

use completion::shell_word;

pub use completion::Completion;
pub use look::{Form, Look};

/// Answers the request in `file`, with what `completion` puts over its fields.
pub fn forecast(config: &Config, file: &Path, completion: &Completion, form: &Form) -> Result<(), Stop> {
    let bytes = completion.over(read(file)?)?;
    let refused = |error: ApiError| Stop::Refused(in_words(&error.into_problem()));
    let inputs =
        api::read_json(&bytes, |raw, faults| api::read_forecast(raw, &config.limits, faults)).map_err(refused)?;
    let answer = service::answer_at_once(&inputs, config.compute.budget()).map_err(|error| match error {
        ServiceError::TooSlow { .. } => Stop::Failed(ApiError::from(error).into_problem().detail().to_owned()),
        other => refused(other.into()),
    })?;
    let text = match form {
        Form::Table => report::forecast_table(&answer),
        Form::Csv(part) => report::part_csv(&answer, *part).map_err(|error| Stop::failed("writing CSV", error))?,
        Form::Json => {
            serde_json::to_string_pretty(&answer).map_err(|error| Stop::failed("writing JSON", error))? + "\n"
        }
        Form::Svg(chart, threshold, theme) => {
            report::forecast_chart(&answer, *chart, *threshold, *theme).map_err(undrawn)?.svg + "\n"
        }
        Form::Html(theme) => {
            let command =
                format!("tailcast forecast {}{}", shell_word(&file.display().to_string()), completion.options());
            report::inline_page(&answer, &command, *theme).map_err(|error| Stop::failed("the report", error))?
        }
    };
    print(&text)
}

/// A chart of what the answer lacks is asked for in vain; a drawing that fails is a fault of ours.
fn undrawn(error: ChartError) -> Stop {
    match error {
        ChartError::Absent(why) => Stop::Refused(format!("tailcast: no chart: {why}\n")),
        error @ ChartError::Drawing(_) => Stop::failed("the chart", error),
    }
}

fn read(file: &Path) -> Result<Vec<u8>, Stop> {
    let mut bytes = Vec::new();
    let outcome = if file == Path::new("-") {
        std::io::stdin().lock().read_to_end(&mut bytes)
    } else {
        std::fs::File::open(file).and_then(|mut file| file.read_to_end(&mut bytes))
    };
    outcome.map_err(|error| Stop::failed(&file.display().to_string(), error))?;
    Ok(bytes)
}

/// A problem as lines for a terminal.
fn in_words(problem: &Problem) -> String {
    let mut text = format!("{}: {}\n", problem.code(), problem.detail());
    for (place, detail) in problem.faults() {
        let place = if place.is_empty() { "(the whole body)" } else { place };
        // Writing to a String cannot fail.
        let _ = writeln!(text, "  {place}: {detail}");
    }
    if let Some(cause) = problem.cause() {
        let _ = writeln!(text, "  cause: {cause}");
    }
    text
}

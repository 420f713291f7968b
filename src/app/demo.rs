//! `demo`: serve, grow an invented network whose mix is known, forecast it through the HTTP API, and show what came.

mod heronsgate;

use std::fmt::Write as _;
use std::net::SocketAddr;

use tokio::task::spawn_blocking;

use super::check::{local_client, with_key};
use super::serve::{Running, start, stop_signal};
use super::{Stop, print};
use crate::api;
use crate::config::{Config, KeysNeeded};
use crate::credential::Credential;
use crate::report::{align, figure, forecast_table, mix_in_words, wrap};
use crate::service::{ForecastRun, IntervalAnswer};
use heronsgate::{Outcome, Story, TRUE_SHARE};

const WIDTH: usize = 100;

/// Shows the demo; with `once` on a free port and a database that is thrown away, and returns; otherwise as
/// configured, and serves until stopped.
pub async fn show(mut config: Config, once: bool) -> Result<(), Stop> {
    let folder = tempfile::tempdir().map_err(|error| Stop::failed("a folder for the demo", error))?;
    if once {
        config.bind = SocketAddr::from(([127, 0, 0, 1], 0));
        // Its database has no keys.
        config.access.keys = KeysNeeded::Off;
        config.database.url = format!("sqlite://{}", folder.path().join("demo.db").display());
    }
    let key = config.access.key.clone();
    let running = start(config).await?;
    let outcome = tell(running.address(), key, once).await;
    if outcome.is_ok() && !once {
        stop_signal().await.map_err(|error| Stop::failed("stop signals", error))?;
    }
    Running::stop(running).await;
    outcome
}

async fn tell(address: SocketAddr, key: Option<Credential>, once: bool) -> Result<(), Stop> {
    let told = spawn_blocking(move || {
        let story = Story::grow()?;
        let run = forecast(address, key.as_ref(), &story)?;
        let introduction = story.introduction();
        let came = story.what_came()?;
        print(&text(address, &introduction, &run, &came, once))
    });
    told.await.unwrap_or_else(|error| Err(Stop::failed("the demo stopped short", error)))
}

/// Asks for the forecast as any client would.
fn forecast(address: SocketAddr, key: Option<&Credential>, story: &Story) -> Result<ForecastRun, Stop> {
    let doing = "the demo's own call";
    let mut response = with_key(local_client(None).post(format!("http://{address}/v1/forecasts")), key)
        .send_json(&story.request)
        .map_err(|error| Stop::failed(doing, error))?;
    let text = response.body_mut().read_to_string().map_err(|error| Stop::failed(doing, error))?;
    if response.status() != 201 {
        return Err(Stop::Failed(format!("{doing} was answered {}: {text}", response.status())));
    }
    serde_json::from_str(&text).map_err(|error| Stop::failed(doing, error))
}

fn text(address: SocketAddr, introduction: &str, run: &ForecastRun, came: &[Outcome], once: bool) -> String {
    let mut lines = wrap(introduction, WIDTH, "");
    lines.push(String::new());
    lines.push(format!("True mix:  {:.1} % of follows land in proportion to followers.", TRUE_SHARE * 100.0));
    lines.extend(wrap(&format!("Estimated: {}", mix_in_words(&run.answer.fit)), WIDTH, "           "));
    lines.extend([String::new(), "FORECAST".to_owned(), String::new()]);
    lines.extend(forecast_table(&run.answer).lines().skip_while(|line| !line.starts_with("date")).map(str::to_owned));
    lines.extend([String::new(), "WHAT CAME: the same network, grown on to the same dates".to_owned(), String::new()]);
    lines.extend(align(&came_rows(run, came)));
    lines.push(String::new());
    lines.extend(calls(address, run, once));
    lines.join("\n") + "\n"
}

/// Each forecast interval beside the count that came.
fn came_rows(run: &ForecastRun, came: &[Outcome]) -> Vec<Vec<String>> {
    let mut rows = vec![["date", "hubs: links >=", "expected", "interval", "came", ""].map(str::to_owned).to_vec()];
    for outcome in came {
        let forecast = run.answer.forecast.iter().find(|at| at.date == outcome.date);
        let tail = forecast.and_then(|at| at.tail.iter().find(|tail| tail.threshold == outcome.threshold));
        let Some((tail, interval)) = tail.and_then(|tail| Some((tail, tail.intervals.last()?))) else { continue };
        rows.push(vec![
            outcome.date.clone(),
            figure(outcome.threshold as f64),
            figure(tail.expected.0),
            interval_text(interval),
            figure(outcome.nodes as f64),
            verdict(interval, outcome.nodes as f64).to_owned(),
        ]);
    }
    rows
}

fn interval_text(interval: &IntervalAnswer) -> String {
    format!("{} to {} ({:.0} %)", figure(interval.low.0), figure(interval.high.0), interval.level.0 * 100.0)
}

fn verdict(interval: &IntervalAnswer, came: f64) -> &'static str {
    if came < interval.low.0 {
        "fewer"
    } else if came > interval.high.0 {
        "more"
    } else {
        "inside"
    }
}

/// The calls behind the demo, ready for a shell.
fn calls(address: SocketAddr, run: &ForecastRun, once: bool) -> Vec<String> {
    let mut text = String::from("CALLS\n\n");
    if once {
        text.push_str("This service stops now; `tailcast demo` without --once keeps one for calls like these.\n\n");
    }
    let body = api::example_request().to_string();
    // Writing to a String cannot fail.
    let _ = write!(
        text,
        "This forecast again, as JSON and as CSV:\n  curl -s http://{address}/v1/forecasts/{id}\n  \
         curl -s 'http://{address}/v1/forecasts/{id}?format=csv'\n\n\
         One of your own, to start from:\n  curl -s http://{address}/v1/forecasts -H 'Content-Type: application/json' \\\n  \
         -d '{body}'\n\nEvery call, to try in a browser: http://{address}/docs",
        id = run.id
    );
    if !once {
        text.push_str("\n\nServing until stopped (Ctrl-C).");
    }
    text.lines().map(str::to_owned).collect()
}

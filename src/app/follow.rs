//! `follow`: a job of the service at `bind`, until it ends.

use std::io::{self, IsTerminal};
use std::thread::sleep;
use std::time::Duration;

use indicatif::{ProgressBar, ProgressStyle};
use serde::Deserialize;
use serde_json::value::RawValue;
use uuid::Uuid;

use super::check::{local_client, reachable, with_key};
use super::{Stop, print};
use crate::config::Config;
use crate::credential::Credential;

/// Time between two looks at the job.
const LOOK: Duration = Duration::from_millis(500);
/// Time that one look may take.
const TIMEOUT: Duration = Duration::from_secs(10);
/// Looks in a row that may fail before the job is given up: a service that restarts takes its jobs up again.
const MOST_FAILED_LOOKS: u32 = 20;
/// Steps of the bar.
const STEPS: u64 = 1000;

/// What of a job is looked at.
#[derive(Deserialize)]
struct Job {
    kind: String,
    network: String,
    state: String,
    progress: Option<f64>,
    result: Option<Box<RawValue>>,
    problem: Option<Problem>,
}

#[derive(Deserialize)]
struct Problem {
    detail: String,
}

/// Shows a bar with the time left while the job is at work, then prints its result, JSON on one line.
pub fn follow(config: &Config, job: &str) -> Result<(), Stop> {
    let id = id_of(job)?;
    let url = format!("http://{}/v1/jobs/{id}", reachable(config.bind));
    let bar = if io::stderr().is_terminal() { ProgressBar::new(STEPS) } else { ProgressBar::hidden() };
    // The template is sound; the plain bar is there all the same.
    let style = ProgressStyle::with_template("{msg} {bar:40} {percent} %, {elapsed} gone, {eta} left");
    let bar = bar.with_style(style.unwrap_or_else(|_| ProgressStyle::default_bar()));
    let mut failed_looks = 0;
    loop {
        match look(&url, config.access.key.as_ref()) {
            Ok(job) => {
                failed_looks = 0;
                bar.set_message(format!("{} of {}, {}", job.kind.replace('_', " "), job.network, job.state));
                bar.set_position((job.progress.unwrap_or(0.0) * STEPS as f64) as u64);
                if let Some(end) = end(&job) {
                    bar.finish_and_clear();
                    return end.and_then(|result| print(&format!("{result}\n")));
                }
            }
            Err(Stop::Failed(_)) if failed_looks < MOST_FAILED_LOOKS => failed_looks += 1,
            Err(stop) => {
                bar.finish_and_clear();
                return Err(stop);
            }
        }
        sleep(LOOK);
    }
}

/// How the job ended; none while it has not.
fn end(job: &Job) -> Option<Result<String, Stop>> {
    let reason = || job.problem.as_ref().map_or("it does not say why", |problem| &problem.detail);
    match job.state.as_str() {
        "succeeded" => Some(Ok(job.result.as_ref().map_or("null", |result| result.get()).to_owned())),
        "failed" => Some(Err(Stop::Failed(format!("the job failed: {}", reason())))),
        "cancelled" => Some(Err(Stop::Failed("the job was called off, and changed nothing".to_owned()))),
        _ => None,
    }
}

/// One look. A service that cannot be reached may be back soon; an answer that is no job will stay one.
fn look(url: &str, key: Option<&Credential>) -> Result<Job, Stop> {
    let doing = format!("asking {url}");
    let failed = |error: ureq::Error| Stop::failed(&doing, error);
    let mut response = with_key(local_client(Some(TIMEOUT)).get(url), key).call().map_err(failed)?;
    let text = response.body_mut().read_to_string().map_err(failed)?;
    match response.status().as_u16() {
        200 => serde_json::from_str(&text).map_err(|error| Stop::Refused(format!("tailcast: {doing}: {error}\n"))),
        status if status >= 500 => Err(Stop::Failed(format!("{url} answers {status}: {text}"))),
        status => Err(Stop::Refused(format!("tailcast: {url} answers {status}: {text}\n"))),
    }
}

/// The id, alone or at the end of an address such as the Location of a 202.
fn id_of(job: &str) -> Result<Uuid, Stop> {
    let last = job.trim_end_matches('/').rsplit('/').next().unwrap_or(job);
    Uuid::try_parse(last).map_err(|_| {
        let message = "name the job by its id, or by the address that a 202 gives as its Location";
        Stop::Refused(format!("tailcast: {job:?} is no job: {message}\n"))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_job_is_named_by_id_or_address() {
        let id = Uuid::now_v7();
        for text in [format!("{id}"), format!("/v1/jobs/{id}"), format!("http://127.0.0.1:8080/v1/jobs/{id}/")] {
            assert_eq!(id_of(&text).unwrap(), id, "{text}");
        }
        assert!(matches!(id_of("/v1/jobs"), Err(Stop::Refused(_))));
    }
}

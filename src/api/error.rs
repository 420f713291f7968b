//! The one table of errors: the status and code each is answered with, and what to do about it.

mod clash;
mod job;
mod source;

use std::time::Duration;

use axum::http::header::{ACCEPT_ENCODING, LOCATION};
use axum::http::{HeaderName, HeaderValue, StatusCode};
use axum::response::{IntoResponse, Response};

use super::decode::{At, Fault, Faults, Place};
use super::problem::Problem;
use crate::report::{ChartError, ReportError, readable};
use crate::service::{JobProblem, ServiceError, StoreFault, Thing};

/// After how long to try again when all places are taken.
const BUSY_RETRY: Duration = Duration::from_secs(1);

/// After how long to try again when somebody has to mend something first.
const MENDING_RETRY: Duration = Duration::from_secs(30);

/// What a 415 for an encoding says may be sent (RFC 9110, section 12.5.3).
const IDENTITY_ONLY: (HeaderName, HeaderValue) = (ACCEPT_ENCODING, HeaderValue::from_static("identity"));

/// The same where gzip is read too.
const GZIP_TOO: (HeaderName, HeaderValue) = (ACCEPT_ENCODING, HeaderValue::from_static("gzip, identity"));

/// Everything a request can end in other than its answer.
#[derive(Debug)]
pub enum ApiError {
    /// The body is not JSON.
    MalformedJson(String),
    /// The content of the request is wrong.
    Invalid(Faults),
    /// The body's media type is none that is read.
    UnsupportedMediaType {
        /// Those that are.
        taken: &'static str,
    },
    /// The body is compressed or otherwise encoded.
    EncodedBody {
        /// Whether gzip would be read.
        gzip: bool,
    },
    /// The body is larger than configured.
    TooLarge {
        /// The largest body, bytes.
        limit: usize,
    },
    /// The body did not arrive in time.
    BodyTooSlow {
        /// The time it had.
        limit: Duration,
    },
    /// The body stopped coming.
    BodyPaused {
        /// The longest pause.
        limit: Duration,
    },
    /// The body broke off.
    BodyBroken,
    /// The link list is larger than configured.
    ListTooLarge {
        /// The largest list, bytes.
        limit: u64,
    },
    /// The job that the request made failed.
    Job(JobProblem),
    /// The job that the request made was called off.
    JobCancelled,
    /// None of the forms that the client takes is one we have.
    NotAcceptable {
        /// Those we have.
        offered: &'static str,
    },
    /// The answer has nothing of what the chart shows.
    NoChart {
        /// What it lacks, and what would help.
        why: String,
        /// Where the answer is kept, when the request made it.
        kept: Option<String>,
    },
    /// As many requests as configured are being served, or their bodies and answers take all the memory there is for them.
    Full {
        /// About how long it takes until what waits is done.
        wait: Duration,
    },
    /// As many connections as configured are open, and none of them rests.
    TooManyConnections,
    /// As many streams of events as configured are open.
    TooManyStreams,
    /// Whoever asks may not.
    Denied(Box<Problem>),
    /// A use case failed.
    Service(ServiceError),
    /// An invariant of this layer does not hold.
    Broken(String),
}

impl From<ServiceError> for ApiError {
    fn from(error: ServiceError) -> Self {
        Self::Service(error)
    }
}

impl From<ChartError> for ApiError {
    fn from(error: ChartError) -> Self {
        match error {
            ChartError::Absent(why) => Self::NoChart { why, kept: None },
            ChartError::Drawing(_) => Self::Broken(error.to_string()),
        }
    }
}

impl From<ReportError> for ApiError {
    fn from(error: ReportError) -> Self {
        Self::Broken(error.to_string())
    }
}

impl ApiError {
    /// A single fault.
    pub fn fault(place: Place, detail: impl Into<String>) -> Self {
        let mut faults = Faults::default();
        faults.push(Fault { place, detail: detail.into() });
        Self::Invalid(faults)
    }

    /// The same, of an answer that is kept here all the same.
    pub fn of_kept(self, place: String) -> Self {
        match self {
            Self::NoChart { why, .. } => Self::NoChart { why, kept: Some(place) },
            other => other,
        }
    }

    /// The error as a problem document: the table.
    pub fn into_problem(self) -> Problem {
        use StatusCode as S;
        match self {
            Self::MalformedJson(why) => Problem::new(S::BAD_REQUEST, "malformed_json", why),
            Self::Invalid(faults) => {
                let detail = "The request was understood but parts of it are wrong; errors lists each with its place.";
                Problem::new(S::BAD_REQUEST, "invalid_request", detail).with_faults(faults)
            }
            Self::UnsupportedMediaType { taken } => {
                let detail = format!("The body must be {taken}, in UTF-8; say so in the header Content-Type.");
                Problem::new(S::UNSUPPORTED_MEDIA_TYPE, "unsupported_media_type", detail)
            }
            Self::EncodedBody { gzip: false } => {
                let detail = "The body must come as it is, without a Content-Encoding; compressed bodies are not read.";
                Problem::new(S::UNSUPPORTED_MEDIA_TYPE, "unsupported_encoding", detail).with_header(IDENTITY_ONLY)
            }
            Self::EncodedBody { gzip: true } => {
                let detail = "The body must come as it is, or compressed with gzip alone.";
                Problem::new(S::UNSUPPORTED_MEDIA_TYPE, "unsupported_encoding", detail).with_header(GZIP_TOO)
            }
            Self::TooLarge { limit } => {
                let detail = format!(
                    "The body is larger than {limit} bytes. A degree with its number of nodes takes one pair however \
                     many nodes there are: send counts per degree, not a list of nodes; or raise \
                     http.body_limit_bytes."
                );
                Problem::new(S::PAYLOAD_TOO_LARGE, "body_too_large", detail)
            }
            Self::BodyTooSlow { limit } => {
                let detail = format!("The body did not arrive within {} s; send it again.", limit.as_secs());
                Problem::new(S::REQUEST_TIMEOUT, "body_too_slow", detail)
            }
            Self::BodyPaused { limit } => {
                let detail = format!("Less than 16 KiB of the list came in {} s; send it again.", limit.as_secs());
                Problem::new(S::REQUEST_TIMEOUT, "body_too_slow", detail)
            }
            Self::ListTooLarge { limit } => {
                let detail = format!(
                    "The link list is larger than {limit} bytes. Compress it with gzip, or raise jobs.link_list_bytes."
                );
                Problem::new(S::PAYLOAD_TOO_LARGE, "body_too_large", detail)
            }
            Self::Job(problem) => job::job_problem(problem),
            Self::JobCancelled => {
                let detail = "The job was called off before it ended; nothing was changed.";
                Problem::new(S::CONFLICT, "job_cancelled", detail)
            }
            Self::BodyBroken => {
                let detail = "The body broke off before its announced end; send it again.";
                Problem::new(S::BAD_REQUEST, "body_broken_off", detail)
            }
            Self::NotAcceptable { offered } => {
                let detail = format!("What was asked for is offered as {offered}; name one of them in Accept.");
                Problem::new(S::NOT_ACCEPTABLE, "not_acceptable", detail)
            }
            Self::NoChart { why, kept } => no_chart(&why, kept),
            Self::Full { wait } => {
                let detail = "As many requests as this service takes at once are being served, or as much memory as it has for bodies \
                              and answers is taken; try again when Retry-After says.";
                Problem::new(S::SERVICE_UNAVAILABLE, "overloaded", detail).retry_after(wait)
            }
            Self::TooManyConnections => {
                let detail = "As many connections as this service keeps are open and at work; close some, use them for several \
                              requests each, or raise http.max_connections.";
                Problem::new(S::SERVICE_UNAVAILABLE, "overloaded", detail).retry_after(BUSY_RETRY)
            }
            Self::TooManyStreams => {
                let detail = "As many streams of events as this service keeps open are open; read the thing itself now and then, \
                              try again later, or raise http.max_streams.";
                Problem::new(S::SERVICE_UNAVAILABLE, "too_many_streams", detail).retry_after(MENDING_RETRY)
            }
            Self::Denied(problem) => *problem,
            Self::Service(error) => service_problem(error),
            Self::Broken(cause) => broken(cause),
        }
    }
}

fn service_problem(error: ServiceError) -> Problem {
    use StatusCode as S;
    match error {
        ServiceError::NotFound(thing) => Problem::new(S::NOT_FOUND, "not_found", missing(thing)),
        ServiceError::KeyTaken => {
            let detail = "This Idempotency-Key came before with another body; use a new key for a new request.";
            Problem::new(S::CONFLICT, "idempotency_key_reused", detail)
        }
        ServiceError::TagMismatch => {
            let detail = "What stands there is not what If-Match or If-None-Match asks for; read it again and use its \
                          ETag.";
            Problem::new(S::PRECONDITION_FAILED, "precondition_failed", detail)
        }
        ServiceError::Clash(clash) => clash::clash_problem(clash),
        ServiceError::NoSnapshot => {
            let detail = "The network has no snapshot, so there is nothing to start from. PUT one under \
                          /v1/networks/{name}/snapshots/{as_of}, or transitions, or a link list.";
            Problem::new(S::UNPROCESSABLE_ENTITY, "no_snapshot", detail)
        }
        ServiceError::NoScenarios(names) => {
            let names: Vec<String> = names.iter().map(|name| format!("{name:?}")).collect();
            let detail = format!(
                "The network keeps no scenario named {}; its list of scenarios has the names.",
                names.join(" or ")
            );
            Problem::new(S::NOT_FOUND, "not_found", detail)
        }
        ServiceError::NothingToCompare => {
            let detail =
                "The network keeps no scenario to compare; PUT one under /v1/networks/{name}/scenarios/{scenario}.";
            Problem::new(S::UNPROCESSABLE_ENTITY, "no_scenario", detail)
        }
        ServiceError::NoPlan => {
            let detail = "The network has no forecast_plan that says for which thresholds and dates to compare. Store one with \
                          its settings, or give thresholds and until (and every) in the query.";
            Problem::new(S::UNPROCESSABLE_ENTITY, "no_plan", detail)
        }
        ServiceError::NoForecast(why) => {
            Problem::new(S::NOT_FOUND, "no_forecast", format!("The network has no forecast yet: {}.", readable(&why)))
        }
        error @ (ServiceError::NoticesOff | ServiceError::NotListed) => notice_refused(&error),
        error @ (ServiceError::SourcesOff
        | ServiceError::NoDatabase { .. }
        | ServiceError::SourceBounds { .. }
        | ServiceError::SourceFailed(_)) => source::source_refused(&error),
        ServiceError::Busy { wait } => {
            let detail = "Every worker is taken and the queue is full; try again when Retry-After says.";
            Problem::new(S::SERVICE_UNAVAILABLE, "overloaded", detail).retry_after(wait)
        }
        ServiceError::TooSlow { budget } => {
            let detail = format!(
                "The answer was not ready within {} s. Check rates (they are per day), degrees and dates for their \
                 orders of magnitude, ask for fewer dates and thresholds, try again when less is asked at once, or \
                 raise compute.budget_seconds.",
                budget.as_secs()
            );
            Problem::new(S::SERVICE_UNAVAILABLE, "too_slow", detail).retry_after(budget.max(BUSY_RETRY))
        }
        ServiceError::ArrivalsRequired => {
            let detail = "One snapshot does not tell how many nodes arrive; give arrivals, or a second snapshot.";
            let mut faults = Faults::default();
            faults.add(&At::ROOT.field("arrivals"), "needed with one snapshot, as in {\"per_day\": 42.0}");
            Problem::new(S::UNPROCESSABLE_ENTITY, "arrivals_required", detail).with_faults(faults)
        }
        ServiceError::NotIdentified(why) => Problem::new(S::UNPROCESSABLE_ENTITY, "not_identified", readable(&why)),
        ServiceError::Impossible(why) => Problem::new(S::UNPROCESSABLE_ENTITY, "impossible", readable(&why)),
        ServiceError::NotConverged(why) => {
            let detail = format!(
                "{}. The numbers could not be computed to the stated accuracy; check rates (they are per day), \
                 degrees and dates for their orders of magnitude.",
                readable(&why)
            );
            Problem::new(S::UNPROCESSABLE_ENTITY, "not_converged", detail)
        }
        ServiceError::TablesOutdated => {
            let detail = "The database's tables are not those of this version; run the migrate command.";
            Problem::new(S::SERVICE_UNAVAILABLE, "not_ready", detail).retry_after(BUSY_RETRY)
        }
        ServiceError::Stopping => {
            let detail =
                "This process is about to stop; what it has accepted is finished. Send new requests to another one.";
            Problem::new(S::SERVICE_UNAVAILABLE, "stopping", detail).retry_after(BUSY_RETRY)
        }
        error @ ServiceError::StoreBusy(_) => {
            let detail = "The database is busy; try again shortly.";
            Problem::new(S::SERVICE_UNAVAILABLE, "store_busy", detail)
                .retry_after(BUSY_RETRY)
                .because(error.to_string())
        }
        ServiceError::StoreUnavailable(error) => store_problem(error.fault(), error.to_string()),
        error @ ServiceError::Store(_) => broken(error.to_string()),
        ServiceError::Broken(cause) => broken(cause),
    }
}

/// A database that is to be mended.
fn store_problem(fault: StoreFault, cause: String) -> Problem {
    let (code, detail) = match fault {
        StoreFault::Full => (
            "store_full",
            "The disk that the database lies on is full, so nothing was kept; reading goes on. Try again when whoever runs this \
             service has made room.",
        ),
        StoreFault::ReadOnly => (
            "store_read_only",
            "The database takes no writes as it stands, so nothing was kept; reading goes on. Try again when whoever runs this \
             service has given leave to write its file.",
        ),
        StoreFault::Missing => (
            "store_missing",
            "The database file was removed or replaced, so nothing can be kept or read. Try again when whoever runs this service \
             has put it back, or has started the service again on what stands there now.",
        ),
        StoreFault::Corrupt => (
            "store_corrupt",
            "The database file is damaged, so nothing is written to it; what can be read still is. Try again when whoever runs this \
             service has put a backup in its place.",
        ),
        StoreFault::Busy | StoreFault::Unavailable => (
            "store_unavailable",
            "The database cannot be used as it stands, so nothing can be kept; the log has the cause under this request id. Try \
             again when whoever runs this service has mended it.",
        ),
    };
    Problem::new(StatusCode::SERVICE_UNAVAILABLE, code, detail).retry_after(MENDING_RETRY).because(cause)
}

/// A notice that would not be sent.
fn notice_refused(why: &ServiceError) -> Problem {
    let (code, remedy) = match why {
        ServiceError::NoticesOff => {
            ("notices_off", "Ask them to list the address, or poll the network's limits and accuracy report")
        }
        _ => ("address_not_listed", "Take one that is, or ask them to list this one"),
    };
    let mut faults = Faults::default();
    faults.add(&At::ROOT.field("url"), why.to_string());
    let detail = format!("{}. {remedy}.", readable(&why.to_string()));
    Problem::new(StatusCode::UNPROCESSABLE_ENTITY, code, detail).with_faults(faults)
}

/// What was computed is kept: the client is told where, and is not to compute it again.
fn no_chart(why: &str, kept: Option<String>) -> Problem {
    let why = readable(why);
    let Some(place) = kept else { return Problem::new(StatusCode::UNPROCESSABLE_ENTITY, "no_chart", why) };
    let detail = format!("{why} The run itself was made and is kept under {place}.");
    let problem = Problem::new(StatusCode::UNPROCESSABLE_ENTITY, "no_chart", detail);
    match HeaderValue::from_str(&place) {
        Ok(place) => problem.with_header((LOCATION, place)),
        Err(_) => problem,
    }
}

fn missing(thing: Thing) -> &'static str {
    match thing {
        Thing::Run => "There is no such run: it was never made, or was deleted.",
        Thing::Network => "There is no such network; PUT its settings under /v1/networks/{name} first.",
        Thing::Snapshot => "The network has no snapshot of this date; its list of snapshots has the dates.",
        Thing::Transitions => {
            "The network has no transitions between these dates; its list of transitions has the dates."
        }
        Thing::Job => "There is no such job: it was never taken on, or its record was deleted.",
        Thing::Backtest => "There is no such backtest: it was never made, or was deleted.",
        Thing::Limit => "The network keeps no limit of this name; its list of limits has the names.",
        Thing::Scenario => "The network keeps no scenario of this name; its list of scenarios has the names.",
        Thing::Notice => "The network keeps no notice of this name; its list of notices has the names.",
        Thing::Source => "The network has no source; PUT one under /v1/networks/{name}/source.",
        Thing::LinkEvents => "The network has no link events; PUT them, or a link list to derive them from.",
    }
}

/// A fault of ours: the cause goes to the log, the client gets the request id and nothing else.
fn broken(cause: String) -> Problem {
    let detail = "Something broke on our side; the log has the cause under this request id.";
    Problem::new(StatusCode::INTERNAL_SERVER_ERROR, "internal", detail).because(cause)
}

impl IntoResponse for ApiError {
    fn into_response(self) -> Response {
        self.into_problem().into_response()
    }
}

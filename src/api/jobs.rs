//! `/v1/jobs`: work that outlasts its request.

mod events;

use axum::Json;
use axum::body::Body;
use axum::extract::{FromRequestParts, Path, State};
use axum::http::request::Parts;
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use uuid::Uuid;

use super::access::Sight;
use super::decode::{Fault, Faults, Place};
use super::extract::{NoQuery, ResultFormat, parameters, prefers_events};
use super::pages::{self, NO_CURSOR, escaped};
use super::refusals::{FormRefusals, Refusals};
use super::representation::{self, Validator, header_value};
use super::{ApiError, AppState};
use crate::service::{
    BacktestResult, JobFilter, JobKind, JobOutcome, JobProblem, JobState, JobView, LinkListResult, RefreshResult,
    ServiceError, Thing, sha256_hex,
};

/// Where jobs are.
pub const PATH: &str = "/v1/jobs";

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_jobs)).routes(routes!(get_job, delete_job))
}

/// A job.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct JobAnswer {
    /// Its id.
    id: Uuid,
    /// What it does.
    kind: JobKindName,
    /// The network it is about.
    network: String,
    /// How it stands.
    state: JobStateName,
    /// How far it has come, 0 to 1; null when it ended without a result.
    #[schema(minimum = 0, maximum = 1)]
    progress: Option<f64>,
    /// When it was asked for, RFC 3339.
    #[schema(format = DateTime)]
    created_at: String,
    /// When it was last begun; null while it waits.
    #[schema(format = DateTime)]
    started_at: Option<String>,
    /// When it ended; null until then.
    #[schema(format = DateTime)]
    ended_at: Option<String>,
    /// What was done; null until it has succeeded.
    result: Option<JobResult>,
    /// Why nothing was done; null unless it failed.
    problem: Option<JobProblem>,
}

/// What a job does.
#[derive(Debug, Clone, Copy, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
enum JobKindName {
    /// Counts a link list.
    LinkList,
    /// Makes a network's latest forecast anew, and accounts for earlier ones.
    Refresh,
    /// Forecasts from past snapshots and scores that by what came.
    Backtest,
}

/// What was done, by the kind of the job.
#[derive(Debug, Clone, Serialize, ToSchema)]
#[serde(untagged)]
enum JobResult {
    /// A link list was counted.
    LinkList(LinkListResult),
    /// A network was refreshed.
    Refresh(RefreshResult),
    /// A backtest was made.
    Backtest(BacktestResult),
}

/// How a job stands.
#[derive(Debug, Clone, Copy, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
enum JobStateName {
    /// For a free worker.
    Waiting,
    /// At work.
    Running,
    /// Its result is stored.
    Succeeded,
    /// It came to no result.
    Failed,
    /// It was called off, and changed nothing.
    Cancelled,
}

/// Jobs, newest first.
#[derive(Debug, Clone, Serialize, ToSchema)]
struct JobPage {
    /// The jobs.
    items: Vec<JobAnswer>,
}

impl From<JobView> for JobAnswer {
    fn from(view: JobView) -> Self {
        let (result, problem) = match view.outcome {
            Some(JobOutcome::Result(result)) => (Some(JobResult::LinkList(result)), None),
            Some(JobOutcome::Refresh(result)) => (Some(JobResult::Refresh(result)), None),
            Some(JobOutcome::Backtest(result)) => (Some(JobResult::Backtest(result)), None),
            Some(JobOutcome::Problem(problem)) => (None, Some(problem)),
            None => (None, None),
        };
        Self {
            id: view.job.id,
            kind: match view.job.kind {
                JobKind::LinkList => JobKindName::LinkList,
                JobKind::Refresh => JobKindName::Refresh,
                JobKind::Backtest => JobKindName::Backtest,
            },
            network: view.job.network,
            state: match view.job.state {
                JobState::Waiting => JobStateName::Waiting,
                JobState::Running => JobStateName::Running,
                JobState::Succeeded => JobStateName::Succeeded,
                JobState::Failed => JobStateName::Failed,
                JobState::Cancelled => JobStateName::Cancelled,
            },
            progress: view.progress,
            created_at: view.job.created_at.to_string(),
            started_at: view.job.started_at.map(|time| time.to_string()),
            ended_at: view.job.ended_at.map(|time| time.to_string()),
            result,
            problem,
        }
    }
}

/// What the request that a job was made by is answered: its result, or where it is.
pub fn taken_on(view: JobView, at_once: bool) -> Result<Response, ApiError> {
    match (&view.job.state, &view.outcome) {
        (JobState::Cancelled, _) => return Err(ApiError::JobCancelled),
        (JobState::Failed, Some(JobOutcome::Problem(problem))) => return Err(ApiError::Job(problem.clone())),
        (JobState::Succeeded, _) => return Ok(Json(JobAnswer::from(view)).into_response()),
        _ => {}
    }
    let location = header_value(&format!("{PATH}/{}", view.job.id))?;
    let mut response = (StatusCode::ACCEPTED, Json(JobAnswer::from(view))).into_response();
    response.headers_mut().insert(header::LOCATION, location);
    if at_once {
        response.headers_mut().insert("preference-applied", HeaderValue::from_static("respond-async"));
    }
    Ok(response)
}

/// Read a job
///
/// How it stands; with `Accept: text/event-stream` a stream of Server-Sent Events, each a job as JSON, that ends with the
/// job.
#[utoipa::path(
    get,
    path = "/v1/jobs/{id}",
    tag = "jobs",
    params(
        ("id" = String, Path, description = "Id of the job"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the job still stands so"),
        ("Last-Event-ID" = Option<String>, Header, description = "`end`: the stream was read to its end before"),
    ),
    responses(
        (status = 200, description = "How it stands", headers(
            ("ETag" = String, description = "Strong validator of how it stands, but for a stream"),
        ), content(
            (JobAnswer = "application/json"),
            (serde_json::Value = "text/event-stream"),
        )),
        (status = 204, description = "The stream was read to its end before"),
        (status = 304, description = "The client knows already"),
        Refusals, FormRefusals,
    )
)]
async fn get_job(
    State(state): State<AppState>,
    Path(id): Path<String>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let (id, events) = (job_id(&id)?, prefers_events(&headers)?);
    let view = state.service.job(id).await?;
    if events {
        return events::stream(state.service, &state.streams, view, &headers);
    }
    let text = serde_json::to_string(&JobAnswer::from(view)).map_err(|error| ApiError::Broken(error.to_string()))?;
    let validator = Validator { tag: &sha256_hex(text.as_bytes()), modified: None };
    representation::found(validator, ResultFormat::Json, &headers, || Ok(Body::from(text)))
}

/// List jobs
///
/// Newest first; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/jobs",
    tag = "jobs",
    params(
        ("network" = Option<String>, Query, description = "Only jobs of this tracked network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<Uuid>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of jobs", body = JobPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_jobs(State(state): State<AppState>, sight: Sight, listing: JobListing) -> Result<Response, ApiError> {
    let (found, more) = state.service.list_jobs(JobFilter { seen_by: sight.0, ..listing.filter.clone() }).await?;
    let next = found.last().filter(|_| more).map(|last| {
        let network = listing.filter.network.as_deref().map(|name| format!("&network={}", escaped(name)));
        format!("{PATH}?cursor={}&limit={}{}", last.job.id, listing.filter.limit, network.unwrap_or_default())
    });
    pages::page(JobPage { items: found.into_iter().map(JobAnswer::from).collect() }, next)
}

/// Call a job off
///
/// A job that has not ended is cancelled and changes nothing; the record of one that has ended is deleted.
#[utoipa::path(
    delete,
    path = "/v1/jobs/{id}",
    tag = "jobs",
    params(("id" = String, Path, description = "Id of the job")),
    responses((status = 204, description = "It is cancelled, or its record is gone"), Refusals)
)]
async fn delete_job(
    State(state): State<AppState>,
    Path(id): Path<String>,
    _query: NoQuery,
) -> Result<StatusCode, ApiError> {
    state.service.call_off(job_id(&id)?).await?;
    Ok(StatusCode::NO_CONTENT)
}

/// Reads a job's id from a path; what is no id belongs to no job.
fn job_id(text: &str) -> Result<Uuid, ApiError> {
    Uuid::try_parse(text).map_err(|_| ServiceError::NotFound(Thing::Job).into())
}

/// The query of a list of jobs.
struct JobListing {
    filter: JobFilter,
}

impl FromRequestParts<AppState> for JobListing {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let mut filter = JobFilter { limit: pages::limit(None).unwrap_or(1), ..JobFilter::default() };
        for (name, value) in parameters(&parts.uri, &["network", "limit", "cursor"], &mut faults) {
            let mut fault = |detail: &str| {
                faults.push(Fault { place: Place::Query(name.clone()), detail: detail.to_owned() });
            };
            match name.as_str() {
                "network" if value.contains('\0') => fault("holds a NUL character"),
                "network" => filter.network = Some(value),
                "limit" => match pages::limit(Some(&value)) {
                    Ok(limit) => filter.limit = limit,
                    Err(detail) => fault(&detail),
                },
                "cursor" => match Uuid::try_parse(&value) {
                    Ok(id) => filter.before = Some(id),
                    Err(_) => fault(NO_CURSOR),
                },
                _ => {}
            }
        }
        if faults.is_empty() { Ok(Self { filter }) } else { Err(ApiError::Invalid(faults)) }
    }
}

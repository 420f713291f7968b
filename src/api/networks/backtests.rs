//! `/v1/networks/{name}/backtests`

use axum::extract::{Path, State};
use axum::response::Response;
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use uuid::Uuid;

use crate::api::extract::{NoQuery, OptionalJsonBody, Patience, network_name};
use crate::api::jobs::JobAnswer;
use crate::api::pages::{self, Paging};
use crate::api::refusals::{BodyRefusals, Refusals};
use crate::api::requests::{BacktestBody, read_backtest};
use crate::api::{ApiError, AppState, Problem, backtests, examples, jobs};
use crate::service::{BacktestRequest, BacktestRun, BacktestSummary, JobState, NetworkEvidence, Real, Service};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(create_backtest, list_backtests))
}

/// A backtest's line in a list.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
struct BacktestLine {
    /// Its id.
    id: Uuid,
    /// When it was made, RFC 3339.
    #[schema(format = DateTime)]
    created_at: String,
    /// Hub thresholds.
    thresholds: Vec<u64>,
    /// Snapshots looked ahead to from each origin at most.
    ahead: u64,
    /// Levels of the intervals.
    levels: Vec<Real>,
    /// Whether what is stored of the network is no longer what it stands on.
    outdated: bool,
    /// When counts it stands on were last replaced or deleted; null when they stand.
    #[schema(format = DateTime)]
    evidence_corrected_at: Option<String>,
}

/// Backtests, newest first.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
struct BacktestPage {
    /// The backtests.
    items: Vec<BacktestLine>,
}

impl TryFrom<BacktestSummary> for BacktestLine {
    type Error = ApiError;

    fn try_from(summary: BacktestSummary) -> Result<Self, ApiError> {
        let asked = BacktestRequest::from_json(&summary.task)?;
        Ok(Self {
            id: summary.id,
            created_at: summary.created_at.to_string(),
            thresholds: asked.thresholds.values().to_vec(),
            ahead: asked.ahead as u64,
            levels: asked.levels.values().iter().copied().map(Real).collect(),
            outdated: summary.outdated,
            evidence_corrected_at: summary.evidence_corrected_at.map(|time| time.to_string()),
        })
    }
}

/// Backtest a tracked network
///
/// From every snapshot that has one before it and one after it: what each candidate, each plain trend and their pool would have
/// forecast from what was known then, against what came. Once given the arrivals and links that came, which judges the mechanism, and
/// once by those expected then, which judges the whole. A short one is answered when it is done; a long one, or one sent with
/// `Prefer: respond-async`, with the address of its job, which goes on where it was when the service is restarted, and begins
/// anew when what is stored of the network changes.
#[utoipa::path(
    post,
    path = "/v1/networks/{name}/backtests",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("Prefer" = Option<String>, Header, example = "respond-async", description = "RFC 7240: `respond-async` to be \
            answered at once, `wait=N` to be answered within N seconds, but never later than configured"),
    ),
    request_body(content = Option<BacktestBody>, content_type = "application/json", example = examples::backtest),
    responses(
        (status = 201, description = "The backtest, kept", body = BacktestRun, headers(
            ("Location" = String, description = "Where the backtest is kept"),
            ("ETag" = String, description = "Strong validator of this form of the backtest"),
            ("Last-Modified" = String, description = "When the backtest was made"),
            ("Backtest-State" = String, description = "As of a backtest that is read"),
        )),
        (status = 202, description = "It is taken on", body = JobAnswer, headers(
            ("Location" = String, description = "The job, whose id the backtest will have"),
            ("Preference-Applied" = String, description = "respond-async, when that was preferred"),
        )),
        (status = 409, description = "The network has a backtest that has not ended, or this one was called off",
            body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "There are fewer than three snapshots", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals,
    )
)]
async fn create_backtest(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    patience: Patience,
    OptionalJsonBody(body): OptionalJsonBody,
) -> Result<Response, ApiError> {
    let (name, limits) = (network_name(&name)?, state.limits);
    let NetworkEvidence { evidence, plan, place, .. } = state.service.evidence(&name).await?;
    let snapshots = evidence.snapshots().len();
    let request = body.read(move |raw, faults| read_backtest(raw, plan.as_ref(), snapshots, &limits, faults)).await?;
    Service::check_backtest(&evidence)?;
    drop((evidence, place));
    let id = state.service.take_backtest(name, &request).await?;
    let job = state.service.job_after(id, patience.wait).await?;
    if job.job.state == JobState::Succeeded {
        return backtests::created(state.service.backtest_run(id).await?);
    }
    jobs::taken_on(job, patience.at_once)
}

/// List a network's backtests
///
/// Newest first; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/backtests",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<Uuid>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of backtests", body = BacktestPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_backtests(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let before = paging.after(|cursor| Uuid::try_parse(cursor).ok())?;
    let (found, more) = state.service.backtest_runs(&name, before, paging.limit).await?;
    let path = format!("{}/backtests", super::address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &last.id.to_string()));
    pages::page(BacktestPage { items: found.into_iter().map(BacktestLine::try_from).collect::<Result<_, _>>()? }, next)
}

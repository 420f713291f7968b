//! `/v1/networks/{name}/links`

use axum::extract::{FromRequestParts, Path, State};
use axum::http::request::Parts;
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::decode::{Fault, Faults, Place, every_of};
use crate::api::extract::{LinkListBody, Patience, network_name, parameters};
use crate::api::jobs::{self, JobAnswer};
use crate::api::refusals::{BodyRefusals, Refusals};
use crate::api::{ApiError, AppState, Problem};
use crate::service::{FaultPolicy, LinkListTask};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(put_links))
}

/// Send a link list
///
/// Counts the network's whole time-ordered list of links, oldest first, and puts what it tells (snapshots at the end of
/// each period, the transitions between them, link events) in place of all that is stored of the network. The list is CSV
/// whose header names the columns `time`, `source` and `target`, or one JSON object with these members a line; gzip too.
/// A short list is answered when it is counted; a long one, or one sent with `Prefer: respond-async`, with the address of
/// its job, which goes on when the service is restarted. Until the job has succeeded, what is stored stays as it is.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/links",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("every" = Option<String>, Query, example = "P1M", description = "Period of the snapshots, an ISO 8601 duration; \
            months and years go by the calendar, from 00:00 UTC of the day of the first link. One snapshot, at the end, \
            when left out"),
        ("faults" = inline(Option<FaultsName>), Query, description = "What to do with lines that are malformed, out of \
            order, repeated or link a node to itself; refuse when left out"),
        ("Prefer" = Option<String>, Header, example = "respond-async", description = "RFC 7240: `respond-async` to be \
            answered at once, `wait=N` to be answered within N seconds, but never later than configured"),
        ("Content-Encoding" = Option<String>, Header, description = "gzip, or none"),
    ),
    request_body(content(
        (String = "text/csv", example = "time,source,target\n2026-01-01T08:00:00Z,ana,ben\n2026-01-02,cai,ben\n"),
        (String = "application/x-ndjson", example = "{\"time\": \"2026-01-01\", \"source\": \"ana\", \"target\": \"ben\"}\n"),
    )),
    responses(
        (status = 200, description = "The list is counted, what it tells is stored", body = JobAnswer),
        (status = 202, description = "The list is kept and will be counted", body = JobAnswer, headers(
            ("Location" = String, description = "The job"),
            ("Preference-Applied" = String, description = "respond-async, when that was preferred"),
        )),
        (status = 409, description = "The network has a job that has not ended, or what the list tells cannot be stored",
            body = Problem, content_type = "application/problem+json"),
        Refusals, BodyRefusals,
    )
)]
async fn put_links(
    State(state): State<AppState>,
    Path(name): Path<String>,
    asked: LinkListQuery,
    patience: Patience,
    list: LinkListBody,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let under_way = state.uploads.begin(name.as_str())?;
    let mut upload = state.service.begin_link_list(&name).await?;
    list.receive(&mut upload, &state).await?;
    drop(under_way);
    let id = state.service.take_link_list(name, asked.task, upload).await?;
    let job = state.service.job_after(id, patience.wait).await?;
    jobs::taken_on(job, patience.at_once)
}

/// What to do with faulty lines.
#[derive(utoipa::ToSchema)]
#[schema(rename_all = "snake_case")]
#[expect(dead_code, reason = "documented here, read by hand")]
enum FaultsName {
    /// Stop at the first.
    Refuse,
    /// Pass over them and tell how many there were.
    Skip,
}

/// How a list is to be counted.
struct LinkListQuery {
    task: LinkListTask,
}

impl FromRequestParts<AppState> for LinkListQuery {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let mut task = LinkListTask { every: None, faults: FaultPolicy::Refuse };
        for (name, value) in parameters(&parts.uri, &["every", "faults"], &mut faults) {
            let mut fault = |detail: String| faults.push(Fault { place: Place::Query(name.clone()), detail });
            match (name.as_str(), value.as_str()) {
                ("every", text) => match every_of(text) {
                    Ok(every) => task.every = Some(every),
                    Err(detail) => fault(detail),
                },
                ("faults", "refuse") => task.faults = FaultPolicy::Refuse,
                ("faults", "skip") => task.faults = FaultPolicy::Skip,
                ("faults", _) => fault("faulty lines are met with refuse or skip".to_owned()),
                _ => {}
            }
        }
        if faults.is_empty() { Ok(Self { task }) } else { Err(ApiError::Invalid(faults)) }
    }
}

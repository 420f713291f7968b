//! `/v1/networks/{name}/source`

use axum::Json;
use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::etag;
use super::{address, written};
use crate::api::extract::{JsonBody, NoQuery, Patience, ResultFormat, network_name};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, Refusals};
use crate::api::representation::{self, Conditions, Validator, header_value};
use crate::api::requests::{SourceBody, read_source};
use crate::api::{ApiError, AppState, Problem};
use crate::service::{AskedRun, SourceAnswer, SourceStanding, sha256_hex};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(put_source, get_source, delete_source)).routes(routes!(run_source))
}

/// A source as it is kept now.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct StoredSourceAnswer {
    /// The source and how its runs fare.
    #[serde(flatten)]
    source: SourceAnswer,
    /// Validator of the source itself, for If-Match.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// Keep a source
///
/// Has a query run on a schedule in a database that whoever runs this service lists, speaking PostgreSQL's protocol. Its answer, a row a
/// degree with the columns `degree` and `nodes`, is stored as a snapshot of the time at which the query began, as a PUT of it would be,
/// and a forecast follows. The query is run read-only, as a single statement within `timeout_seconds`. Due times are whole steps of
/// `every` from `starts_at`; those that pass while the service is stopped are made up for by one run. A run that fails is tried again
/// after a pause that grows. Storing a source as it stands keeps its schedule; another one begins anew.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/source",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the source has this ETag; its runs do not matter"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when the network has no source"),
    ),
    request_body(content = SourceBody, content_type = "application/json", example = json!({
        "database": "links", "every": "P1D", "starts_at": "2026-12-01T03:00:00Z",
        "query": "SELECT degree, count(*) AS nodes FROM (SELECT count(*) AS degree FROM links GROUP BY target) AS counted GROUP BY degree"
    })),
    responses(
        (status = 200, description = "The source, stored in place of another", body = StoredSourceAnswer),
        (status = 201, description = "The network's first source, stored", body = StoredSourceAnswer,
            headers(("Location" = String, description = "Where the source is"))),
        (status = 422, description = "This service runs no sources, not in this database, or not as often or as long", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_source(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let location = format!("{}/source", address(&name));
    let terms = body.read(read_source).await?;
    let (stored, made) = state.service.put_source(name, &terms, move |tag| conditions.hold(tag)).await?;
    written(StoredSourceAnswer::from(stored), made, &location)
}

/// Read a source
///
/// The source and how its runs fare: when the next is due, when the last stored its snapshot, why the last that failed did.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/source",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when source and runs still have this ETag"),
    ),
    responses(
        (status = 200, description = "The source and how its runs fare", body = SourceAnswer, headers(
            ("ETag" = String, description = "Strong validator of source and runs"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals,
    )
)]
async fn get_source(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let SourceStanding { answer, tag, .. } = state.service.source(&network_name(&name)?).await?;
    let text = serde_json::to_string(&answer).map_err(|error| ApiError::Broken(error.to_string()))?;
    let tag = format!("{tag}-{}", sha256_hex(text.as_bytes()));
    representation::found(Validator { tag: &tag, modified: None }, ResultFormat::Json, &headers, || {
        Ok(Body::from(text))
    })
}

/// Delete a source
///
/// The snapshots that it stored stay; a run that is at work stores nothing any more.
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/source",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the source has this ETag; its runs do not matter"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_source(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    state.service.delete_source(network_name(&name)?, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

/// Run a source now
///
/// Runs the source's query without waiting for its time; a run that is at work is the one that is asked for. A short one is answered
/// when its snapshot is stored; a long one, or one sent with `Prefer: respond-async`, with where to see what comes of it.
#[utoipa::path(
    post,
    path = "/v1/networks/{name}/source/runs",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("Prefer" = Option<String>, Header, example = "respond-async", description = "RFC 7240: `respond-async` to be \
            answered at once, `wait=N` to be answered within N seconds, but never later than configured"),
    ),
    responses(
        (status = 200, description = "The run has stored a snapshot", body = SourceAnswer),
        (status = 202, description = "The run is due, or at work", body = SourceAnswer, headers(
            ("Location" = String, description = "The source, which tells what comes of it"),
            ("Preference-Applied" = String, description = "respond-async, when that was preferred"),
        )),
        (status = 422, description = "The run failed; the detail says why", body = Problem,
            content_type = "application/problem+json"),
        Refusals,
    )
)]
async fn run_source(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    patience: Patience,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let location = format!("{}/source", address(&name));
    match state.service.run_source(name, patience.wait).await? {
        AskedRun::Succeeded(standing) => Ok(Json(standing.answer).into_response()),
        AskedRun::Goes(standing) => {
            let mut response = (StatusCode::ACCEPTED, Json(standing.answer)).into_response();
            response.headers_mut().insert(header::LOCATION, header_value(&location)?);
            if patience.at_once {
                response.headers_mut().insert("preference-applied", HeaderValue::from_static("respond-async"));
            }
            Ok(response)
        }
    }
}

impl From<SourceStanding> for StoredSourceAnswer {
    fn from(standing: SourceStanding) -> Self {
        Self { source: standing.answer, etag: etag(&standing.tag), updated_at: standing.updated_at.to_string() }
    }
}

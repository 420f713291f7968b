//! `/v1/networks/{name}/notices`

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::etag;
use super::{address, written};
use crate::api::extract::{JsonBody, NoQuery, ResultFormat, network_name, question_name};
use crate::api::pages::{self, Paging};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, Refusals};
use crate::api::representation::{self, Conditions, Validator};
use crate::api::requests::{NoticeBody, read_notice};
use crate::api::{ApiError, AppState, Problem};
use crate::service::{NoticeAnswer, NoticeStanding, QuestionName, sha256_hex};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_notices)).routes(routes!(put_notice, get_notice, delete_notice))
}

/// A notice as it is kept now.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct StoredNoticeAnswer {
    /// The notice and how its events fare.
    #[serde(flatten)]
    notice: NoticeAnswer,
    /// Validator of the notice itself, for If-Match.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// Notices, in the order of their names.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct NoticePage {
    /// The notices.
    items: Vec<StoredNoticeAnswer>,
}

/// Keep a notice
///
/// Has events sent to an address when the risk of a kept limit passes its line or is within it again, and when forecasts begin or cease to
/// drift. The address must be among those that whoever runs this service lists. An event is a POST of a CloudEvent, signed as Standard
/// Webhooks says, and is tried until it is answered 200 to 299 or the configured time is over. What is told is how the next forecast
/// differs from the one before; the first answer that is above its line is told too. Storing a notice again has what waits tried at
/// once. A network keeps up to 10 notices.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/notices/{notice}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("notice" = String, Path, description = "The notice"),
        ("If-Match" = Option<String>, Header, description = "Only when the notice has this ETag; its deliveries do not matter"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when there is no such notice"),
    ),
    request_body(content = NoticeBody, content_type = "application/json",
        example = json!({"url": "https://hooks.example.org/tailcast", "on": ["limit_risk", "drift"]})),
    responses(
        (status = 200, description = "The notice, stored in place of another", body = StoredNoticeAnswer),
        (status = 201, description = "A new notice, stored", body = StoredNoticeAnswer,
            headers(("Location" = String, description = "Where the notice is"))),
        (status = 409, description = "The network has as many notices as it may have", body = Problem,
            content_type = "application/problem+json"),
        (status = 422, description = "This service sends no notices, or not to this address", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_notice(
    State(state): State<AppState>,
    Path((network, notice)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let (network, name) = (network_name(&network)?, question_name("notice", &notice)?);
    let location = format!("{}/notices/{}", address(&network), name.as_str());
    let terms = body.read(read_notice).await?;
    let allows = move |tag: Option<&str>| conditions.hold(tag);
    let (stored, made) = state.service.put_notice(network, name, &terms, allows).await?;
    written(StoredNoticeAnswer::from(stored), made, &location)
}

/// Read a notice
///
/// The notice and how its events fare: what waits, what was taken, why the last attempt failed, what was given up.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/notices/{notice}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("notice" = String, Path, description = "The notice"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when notice and deliveries still have this ETag"),
    ),
    responses(
        (status = 200, description = "The notice and how its events fare", body = NoticeAnswer, headers(
            ("ETag" = String, description = "Strong validator of notice and deliveries"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals,
    )
)]
async fn get_notice(
    State(state): State<AppState>,
    Path((network, notice)): Path<(String, String)>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let name = question_name("notice", &notice)?;
    let NoticeStanding { answer, tag, .. } = state.service.notice(&network_name(&network)?, &name).await?;
    let text = serde_json::to_string(&answer).map_err(|error| ApiError::Broken(error.to_string()))?;
    let tag = format!("{tag}-{}", sha256_hex(text.as_bytes()));
    representation::found(Validator { tag: &tag, modified: None }, ResultFormat::Json, &headers, || {
        Ok(Body::from(text))
    })
}

/// List notices
///
/// In the order of their names, each with how its events fare; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/notices",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of notices", body = NoticePage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_notices(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let after = paging.after(|cursor| QuestionName::new(cursor).ok())?;
    let (found, more) = state.service.list_notices(&name, after, paging.limit).await?;
    let path = format!("{}/notices", address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &last.answer.name));
    pages::page(NoticePage { items: found.into_iter().map(StoredNoticeAnswer::from).collect() }, next)
}

/// Delete a notice
///
/// Its events that wait go with it; one that is on its way may still arrive.
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/notices/{notice}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("notice" = String, Path, description = "The notice"),
        ("If-Match" = Option<String>, Header, description = "Only when the notice has this ETag; its deliveries do not matter"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_notice(
    State(state): State<AppState>,
    Path((network, notice)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let notice = question_name("notice", &notice)?;
    state.service.delete_notice(network_name(&network)?, notice, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

impl From<NoticeStanding> for StoredNoticeAnswer {
    fn from(standing: NoticeStanding) -> Self {
        Self { notice: standing.answer, etag: etag(&standing.tag), updated_at: standing.updated_at.to_string() }
    }
}

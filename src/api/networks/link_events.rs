//! `/v1/networks/{name}/link-events`

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::LinkEventsLine;
use super::{address, written};
use crate::api::extract::{JsonBody, NoQuery, ResultFormat, network_name};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, Refusals};
use crate::api::representation::{self, Conditions, Validator};
use crate::api::requests::{LinkEventsBody, read_link_events};
use crate::api::{ApiError, AppState, Problem, examples};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(put_link_events, get_link_events, delete_link_events))
}

/// Store link events
///
/// Stores what the network's list of links tells of attachment, in place of what it has.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/link-events",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the link events have this ETag"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when the network has none"),
    ),
    request_body(content = LinkEventsBody, content_type = "application/json", example = examples::link_events),
    responses(
        (status = 200, description = "What is stored now in place of others", body = LinkEventsLine),
        (status = 201, description = "What is stored now", body = LinkEventsLine,
            headers(("Location" = String, description = "Where the link events are"))),
        (status = 409, description = "The network has all it may have", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_link_events(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let (name, limits) = (network_name(&name)?, state.limits);
    let location = format!("{}/link-events", address(&name));
    let events = body.read(move |raw, faults| read_link_events(raw, &limits, faults)).await?;
    let (stored, made) = state.service.put_link_events(name, events, move |tag| conditions.hold(tag)).await?;
    written(LinkEventsLine::from(stored), made, &location)
}

/// Read link events
///
/// In the form in which they are given.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/link-events",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the link events still have this ETag"),
    ),
    responses(
        (status = 200, description = "The link events", body = LinkEventsBody, headers(
            ("ETag" = String, description = "Strong validator of the link events"),
            ("Last-Modified" = String, description = "When they were last stored"),
        )),
        (status = 304, description = "The client has them already"),
        Refusals,
    )
)]
async fn get_link_events(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let stored = state.service.link_events(&network_name(&name)?).await?;
    let validator = Validator { tag: &stored.tag, modified: Some(stored.updated_at) };
    representation::found(validator, ResultFormat::Json, &headers, || Ok(Body::from(stored.statistics.clone())))
}

/// Delete link events
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/link-events",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the link events have this ETag"),
    ),
    responses((status = 204, description = "They are gone"), Refusals, ConditionRefusals)
)]
async fn delete_link_events(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    state.service.delete_link_events(network_name(&name)?, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

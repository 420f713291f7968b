//! `/v1/networks`: tracked networks and their settings; what is stored of them and runs from it in the rooms below.

mod accuracy;
mod answers;
mod backtests;
mod comparison;
mod events;
mod latest;
mod limits;
mod link_events;
mod links;
mod notices;
mod runs;
mod scenarios;
mod snapshots;
mod source;
mod transitions;

use axum::Json;
use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode, header};
use axum::response::{IntoResponse, Response};
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::access::Sight;
use super::extract::{JsonBody, NoQuery, ResultFormat, network_name};
use super::pages::{self, Paging};
use super::refusals::{BodyRefusals, ConditionRefusals, Refusals};
use super::representation::{self, Conditions, Validator, header_value};
use super::requests::{NetworkBody, read_network};
use super::{ApiError, AppState, Problem, examples};
use crate::service::NetworkName;
use answers::{NetworkAnswer, NetworkLine, NetworkPage, StoredNetworkAnswer};

pub use latest::{ROUTE as LATEST_ROUTE, polled_network};

const PATH: &str = "/v1/networks";

/// The routes of this resource and of those under it.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new()
        .routes(routes!(list_networks))
        .routes(routes!(put_network, get_network, delete_network))
        .merge(snapshots::routes())
        .merge(transitions::routes())
        .merge(link_events::routes())
        .merge(links::routes())
        .merge(latest::routes())
        .merge(events::routes())
        .merge(accuracy::routes())
        .merge(runs::routes())
        .merge(backtests::routes())
        .merge(limits::routes())
        .merge(scenarios::routes())
        .merge(comparison::routes())
        .merge(notices::routes())
        .merge(source::routes())
}

/// Track a network
///
/// Stores its settings, in place of those it has. They hold for everything that is stored of it. With a `forecast_plan`, its
/// forecast is made anew whenever what is stored changes, and held against the snapshots that come later.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the settings have this ETag"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when there is no such network"),
    ),
    request_body(content = NetworkBody, content_type = "application/json", example = examples::network),
    responses(
        (status = 200, description = "The settings, stored in place of others", body = StoredNetworkAnswer),
        (status = 201, description = "The settings of a new network, stored", body = StoredNetworkAnswer,
            headers(("Location" = String, description = "Where the network is"))),
        (status = 409, description = "degree_kind would change under what is stored", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_network(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let limits = state.limits;
    let settings = body.read(move |raw, faults| read_network(raw, &limits, faults)).await?;
    let (stored, made) = state.service.put_network(&name, &settings, move |tag| conditions.hold(tag)).await?;
    written(StoredNetworkAnswer::try_from(stored)?, made, &address(&name))
}

/// Read a network's settings
#[utoipa::path(
    get,
    path = "/v1/networks/{name}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the settings still have this ETag"),
    ),
    responses(
        (status = 200, description = "The settings", body = NetworkAnswer, headers(
            ("ETag" = String, description = "Strong validator of the settings"),
            ("Last-Modified" = String, description = "When they were last stored"),
        )),
        (status = 304, description = "The client has them already"),
        Refusals,
    )
)]
async fn get_network(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let stored = state.service.network(&network_name(&name)?).await?;
    let validator = Validator { tag: &stored.settings.tag.clone(), modified: Some(stored.updated_at) };
    representation::found(validator, ResultFormat::Json, &headers, || {
        json_body(&NetworkAnswer::try_from(stored.settings)?)
    })
}

/// List tracked networks
///
/// In the order of their names, each with what is stored of it; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks",
    tag = "networks",
    params(
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of networks", body = NetworkPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_networks(State(state): State<AppState>, sight: Sight, paging: Paging) -> Result<Response, ApiError> {
    let after = paging.after(|cursor| NetworkName::new(cursor).ok())?;
    let (found, more) = state.service.networks(after, paging.limit, sight.0).await?;
    let next = found.last().filter(|_| more).map(|last| paging.next(PATH, &last.network.settings.name));
    let items = found.into_iter().map(NetworkLine::try_from).collect::<Result<_, _>>()?;
    pages::page(NetworkPage { items }, next)
}

/// Stop tracking a network
///
/// Its settings go, and with them all that is stored of it; its runs stay.
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("If-Match" = Option<String>, Header, description = "Only when the settings have this ETag"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_network(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    state.service.delete_network(network_name(&name)?, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

/// Where a network is.
fn address(name: &NetworkName) -> String {
    format!("{PATH}/{}", name.as_str())
}

/// What a PUT answers: what is stored now. Its validator is in the content, for a header would say that the bytes sent
/// are the bytes kept (RFC 9110, section 9.3.4).
fn written(answer: impl serde::Serialize, made: bool, address: &str) -> Result<Response, ApiError> {
    if !made {
        return Ok(Json(answer).into_response());
    }
    let mut response = (StatusCode::CREATED, Json(answer)).into_response();
    response.headers_mut().insert(header::LOCATION, header_value(address)?);
    Ok(response)
}

fn json_body(answer: &impl serde::Serialize) -> Result<Body, ApiError> {
    serde_json::to_vec(answer).map(Body::from).map_err(|error| ApiError::Broken(error.to_string()))
}

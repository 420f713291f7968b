//! `/v1/networks/{name}/transitions`

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use jiff::Timestamp;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::{TransitionTableAnswer, TransitionsLine, TransitionsPage};
use super::{address, json_body, written};
use crate::api::decode::instant_of;
use crate::api::extract::{NoQuery, RowsBody, TableFormat, date, network_name};
use crate::api::pages::{self, Paging};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, FormRefusals, Refusals};
use crate::api::representation::{self, Conditions, LIGHT_BYTES, Validator};
use crate::api::requests::{TransitionCountsBody, read_transitions, read_transitions_csv};
use crate::api::{ApiError, AppState, Problem, examples};
use crate::report;
use crate::service::{NetworkName, StoredTransitions, date_text};

/// Network, start and end in a path.
type TablePath = Path<(String, String, String)>;

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_transitions)).routes(routes!(
        put_transitions,
        get_transitions,
        delete_transitions
    ))
}

/// Store transitions
///
/// Stores how many nodes went from each degree to each other between two dates, in place of what is stored between them.
/// Snapshots of these dates, and transitions that end or start at one of them, must have the same counts; where there is
/// no snapshot of a date, the counts that the transitions tell stand for it.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/transitions/{from}/{to}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("from" = String, Path, description = "The earlier date: RFC 3339, or a bare date for 00:00 UTC"),
        ("to" = String, Path, description = "The later date"),
        ("If-Match" = Option<String>, Header, description = "Only when the transitions have this ETag"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when none are stored between these dates"),
    ),
    request_body(content(
        (TransitionCountsBody = "application/json", example = examples::transitions),
        (String = "text/csv", example = "degree_before,degree_after,nodes\n0,0,4900\n0,1,300\n,0,1200\n7,,2\n"),
    )),
    responses(
        (status = 200, description = "What is stored now in place of other transitions", body = TransitionsLine),
        (status = 201, description = "What is stored now", body = TransitionsLine,
            headers(("Location" = String, description = "Where the transitions are"))),
        (status = 409, description = "They overlap stored ones or do not fit stored counts, or the network has all it may \
            have", body = Problem, content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_transitions(
    State(state): State<AppState>,
    path: TablePath,
    _query: NoQuery,
    conditions: Conditions,
    body: RowsBody,
) -> Result<Response, ApiError> {
    let (name, dates) = table(path)?;
    let location = format!("{}/transitions/{}/{}", address(&name), date_text(dates.0), date_text(dates.1));
    let limits = state.limits;
    let read = body
        .read(
            move |raw, faults| read_transitions(raw, dates, &limits, faults),
            move |bytes, faults| read_transitions_csv(bytes, dates, &limits, faults),
        )
        .await?;
    let (stored, made) = state.service.put_transitions(name, read, move |tag| conditions.hold(tag)).await?;
    written(TransitionsLine::from(stored), made, &location)
}

/// Read transitions
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/transitions/{from}/{to}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("from" = String, Path, description = "The earlier date"),
        ("to" = String, Path, description = "The later date"),
        ("format" = inline(Option<TableFormat>), Query, description = "Goes before Accept"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the transitions still have this ETag"),
    ),
    responses(
        (status = 200, description = "The transitions", headers(
            ("ETag" = String, description = "Strong validator of this form of the transitions"),
            ("Last-Modified" = String, description = "When they were last stored"),
        ), content(
            (TransitionTableAnswer = "application/json"),
            (String = "text/csv"),
        )),
        (status = 304, description = "The client has them already"),
        Refusals, FormRefusals,
    )
)]
async fn get_transitions(
    State(state): State<AppState>,
    path: TablePath,
    format: TableFormat,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let (name, dates) = table(path)?;
    let stored = state.service.transitions(&name, dates).await?;
    let (tag, modified) = (stored.summary.tag.clone(), Some(stored.summary.updated_at));
    let (validator, light) = (Validator { tag: &tag, modified }, stored.counts.len() <= LIGHT_BYTES);
    let content = move || match format {
        TableFormat::Json => json_body(&TransitionTableAnswer::try_from(stored)?),
        TableFormat::Csv => csv(&stored),
    };
    representation::found_drawn(validator, format.into(), &headers, light, content).await
}

/// List transitions
///
/// Oldest first, without their rows; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/transitions",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of tables of transitions", body = TransitionsPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_transitions(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let after = paging.after(|cursor| instant_of(cursor).ok())?;
    let (found, more) = state.service.transitions_list(&name, after, paging.limit).await?;
    let path = format!("{}/transitions", address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &date_text(last.from)));
    pages::page(TransitionsPage { items: found.into_iter().map(TransitionsLine::from).collect() }, next)
}

/// Delete transitions
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/transitions/{from}/{to}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("from" = String, Path, description = "The earlier date"),
        ("to" = String, Path, description = "The later date"),
        ("If-Match" = Option<String>, Header, description = "Only when the transitions have this ETag"),
    ),
    responses((status = 204, description = "They are gone"), Refusals, ConditionRefusals)
)]
async fn delete_transitions(
    State(state): State<AppState>,
    path: TablePath,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let (name, dates) = table(path)?;
    state.service.delete_transitions(name, dates, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

fn table(Path((name, from, to)): TablePath) -> Result<(NetworkName, (Timestamp, Timestamp)), ApiError> {
    Ok((network_name(&name)?, (date("from", &from)?, date("to", &to)?)))
}

fn csv(stored: &StoredTransitions) -> Result<Body, ApiError> {
    let rows: Vec<(Option<u64>, Option<u64>, u64)> =
        serde_json::from_str(&stored.counts).map_err(|error| ApiError::Broken(error.to_string()))?;
    Ok(report::transitions_csv(&rows).into())
}

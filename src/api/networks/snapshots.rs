//! `/v1/networks/{name}/snapshots`

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::{SnapshotAnswer, SnapshotLine, SnapshotPage};
use super::{address, json_body, written};
use crate::api::decode::instant_of;
use crate::api::extract::{NoQuery, RowsBody, TableFormat, date, network_name};
use crate::api::pages::{self, Paging};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, FormRefusals, Refusals};
use crate::api::representation::{self, Conditions, LIGHT_BYTES, Validator};
use crate::api::requests::{DegreeCountsBody, read_snapshot, read_snapshot_csv};
use crate::api::{ApiError, AppState, Problem, examples};
use crate::report;
use crate::service::{StoredSnapshot, date_text};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_snapshots)).routes(routes!(put_snapshot, get_snapshot, delete_snapshot))
}

/// Store a snapshot
///
/// Stores the degree counts at a date, in place of those it has. Where transitions start or end at the date, their
/// counts must be the same.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/snapshots/{as_of}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("as_of" = String, Path, description = "The date: RFC 3339, or a bare date for 00:00 UTC"),
        ("If-Match" = Option<String>, Header, description = "Only when the snapshot has this ETag"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when the date has no snapshot"),
    ),
    request_body(content(
        (DegreeCountsBody = "application/json", example = examples::snapshot),
        (String = "text/csv", example = "degree,nodes\n0,5400\n1,1075\n40,3\n"),
    )),
    responses(
        (status = 200, description = "What is stored now in place of another snapshot", body = SnapshotLine),
        (status = 201, description = "What is stored now", body = SnapshotLine,
            headers(("Location" = String, description = "Where the snapshot is"))),
        (status = 409, description = "It does not fit the stored transitions, or the network has all it may have",
            body = Problem, content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_snapshot(
    State(state): State<AppState>,
    Path((name, as_of)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
    body: RowsBody,
) -> Result<Response, ApiError> {
    let (name, as_of, limits) = (network_name(&name)?, date("as_of", &as_of)?, state.limits);
    let location = format!("{}/snapshots/{}", address(&name), date_text(as_of));
    let snapshot = body
        .read(
            move |raw, faults| read_snapshot(raw, as_of, &limits, faults),
            move |bytes, faults| read_snapshot_csv(bytes, as_of, &limits, faults),
        )
        .await?;
    let (stored, made) = state.service.put_snapshot(name, snapshot, move |tag| conditions.hold(tag)).await?;
    written(SnapshotLine::from(stored), made, &location)
}

/// Read a snapshot
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/snapshots/{as_of}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("as_of" = String, Path, description = "The date"),
        ("format" = inline(Option<TableFormat>), Query, description = "Goes before Accept"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the snapshot still has this ETag"),
    ),
    responses(
        (status = 200, description = "The snapshot", headers(
            ("ETag" = String, description = "Strong validator of this form of the snapshot"),
            ("Last-Modified" = String, description = "When it was last stored"),
        ), content(
            (SnapshotAnswer = "application/json"),
            (String = "text/csv"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals, FormRefusals,
    )
)]
async fn get_snapshot(
    State(state): State<AppState>,
    Path((name, as_of)): Path<(String, String)>,
    format: TableFormat,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let stored = state.service.snapshot(&network_name(&name)?, date("as_of", &as_of)?).await?;
    let (tag, modified) = (stored.summary.tag.clone(), Some(stored.summary.updated_at));
    let (validator, light) = (Validator { tag: &tag, modified }, stored.degree_counts.len() <= LIGHT_BYTES);
    let content = move || match format {
        TableFormat::Json => json_body(&SnapshotAnswer::try_from(stored)?),
        TableFormat::Csv => csv(&stored),
    };
    representation::found_drawn(validator, format.into(), &headers, light, content).await
}

/// List snapshots
///
/// Oldest first, without their counts; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/snapshots",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of snapshots", body = SnapshotPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_snapshots(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let after = paging.after(|cursor| instant_of(cursor).ok())?;
    let (found, more) = state.service.snapshots(&name, after, paging.limit).await?;
    let path = format!("{}/snapshots", address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &date_text(last.as_of)));
    pages::page(SnapshotPage { items: found.into_iter().map(SnapshotLine::from).collect() }, next)
}

/// Delete a snapshot
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/snapshots/{as_of}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("as_of" = String, Path, description = "The date"),
        ("If-Match" = Option<String>, Header, description = "Only when the snapshot has this ETag"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_snapshot(
    State(state): State<AppState>,
    Path((name, as_of)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let (name, as_of) = (network_name(&name)?, date("as_of", &as_of)?);
    state.service.delete_snapshot(name, as_of, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

fn csv(stored: &StoredSnapshot) -> Result<Body, ApiError> {
    let pairs: Vec<(u64, u64)> =
        serde_json::from_str(&stored.degree_counts).map_err(|error| ApiError::Broken(error.to_string()))?;
    Ok(report::degree_counts_csv(&pairs).into())
}

//! `/v1/networks/{name}/limits`

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
use crate::api::representation::{self, Conditions, Content, Validator};
use crate::api::requests::{KeptLimitBody, read_kept_limit};
use crate::api::{ApiError, AppState, Problem};
use crate::service::{KeptLimitAnswer, LimitStanding, LimitState, QuestionKind, QuestionName, sha256_hex};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_limits)).routes(routes!(put_limit, get_limit, delete_limit))
}

/// A limit as it is kept now.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct StoredLimitAnswer {
    /// The limit and how it fares.
    #[serde(flatten)]
    limit: KeptLimitAnswer,
    /// Validator of the limit itself, for If-Match.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// A limit's line in a list.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct LimitLine {
    /// Its name.
    name: String,
    /// Links from which on a node counts.
    threshold: u64,
    /// The most nodes that are provided for.
    max_nodes: u64,
    /// The date up to which it must hold.
    by: String,
    /// Probability of a crossing that is put up with.
    #[schema(value_type = f64)]
    risk: crate::service::Real,
    /// How its answer stands to what is stored.
    state: LimitState,
    /// Its answer in words; null when there is none.
    verdict: Option<String>,
    /// The state in words.
    detail: String,
    /// Validator of the limit itself, for If-Match.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// Limits, in the order of their names.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct LimitPage {
    /// The limits.
    items: Vec<LimitLine>,
}

/// Keep a limit
///
/// Keeps a limit on the number of hubs, in place of the one of this name. It is answered with every forecast by the network's plan;
/// storing or deleting it has the forecast made anew. A network keeps up to 50 limits.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/limits/{limit}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = String, Path, description = "The limit"),
        ("If-Match" = Option<String>, Header, description = "Only when the limit has this ETag; its answer does not matter"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when there is no such limit"),
    ),
    request_body(content = KeptLimitBody, content_type = "application/json",
        example = json!({"threshold": 50, "max_nodes": 120, "by": "2027-06-01", "risk": 0.05})),
    responses(
        (status = 200, description = "The limit, stored in place of another", body = StoredLimitAnswer),
        (status = 201, description = "A new limit, stored", body = StoredLimitAnswer,
            headers(("Location" = String, description = "Where the limit is"))),
        (status = 409, description = "The network has as many limits as it may have", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_limit(
    State(state): State<AppState>,
    Path((network, limit)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let (network, name) = (network_name(&network)?, question_name("limit", &limit)?);
    let told = name.as_str().to_owned();
    let limit = body.read(move |raw, faults| read_kept_limit(raw, told, faults)).await?;
    let allows = move |tag: Option<&str>| conditions.hold(tag);
    let (stored, made) = state.service.put_limit(network.clone(), name.clone(), &limit, allows).await?;
    // Of what this call stored, whatever another has made of the limit since.
    let standing = state.service.standing(&network, &stored).await?;
    let location = format!("{}/limits/{}", address(&network), name.as_str());
    written(StoredLimitAnswer::from(standing), made, &location)
}

/// Read a limit
///
/// The limit and how it fares by the network's latest forecast; nothing is computed, so it is cheap to poll. If-Match on changes of
/// the limit takes the ETag of any of its answers.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/limits/{limit}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = String, Path, description = "The limit"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when limit and answer still have this ETag"),
    ),
    responses(
        (status = 200, description = "The limit and how it fares", body = KeptLimitAnswer, headers(
            ("ETag" = String, description = "Strong validator of limit and answer"),
            ("Last-Modified" = String, description = "When limit or answer last changed; absent unless the answer is current"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals,
    )
)]
async fn get_limit(
    State(state): State<AppState>,
    Path((network, limit)): Path<(String, String)>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let name = question_name("limit", &limit)?;
    let LimitStanding { answer, tag, modified, .. } = state.service.limit(&network_name(&network)?, &name).await?;
    let text = serde_json::to_string(&answer).map_err(|error| ApiError::Broken(error.to_string()))?;
    let tag = format!("{tag}-{}", sha256_hex(text.as_bytes()));
    representation::found(Validator { tag: &tag, modified }, ResultFormat::Json, &headers, || Ok(Content::json(text)))
}

/// List limits
///
/// In the order of their names, each with how it fares in words; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/limits",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of limits", body = LimitPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_limits(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let after = paging.after(|cursor| QuestionName::new(cursor).ok())?;
    let (found, more) = state.service.limits(&name, after, paging.limit).await?;
    let path = format!("{}/limits", address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &last.answer.name));
    pages::page(LimitPage { items: found.into_iter().map(LimitLine::from).collect() }, next)
}

/// Delete a limit
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/limits/{limit}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = String, Path, description = "The limit"),
        ("If-Match" = Option<String>, Header, description = "Only when the limit has this ETag; its answer does not matter"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_limit(
    State(state): State<AppState>,
    Path((network, limit)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let limit = (QuestionKind::Limit, question_name("limit", &limit)?);
    state.service.delete_question(network_name(&network)?, limit, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

impl From<LimitStanding> for StoredLimitAnswer {
    fn from(standing: LimitStanding) -> Self {
        Self { limit: standing.answer, etag: etag(&standing.tag), updated_at: standing.updated_at.to_string() }
    }
}

impl From<LimitStanding> for LimitLine {
    fn from(standing: LimitStanding) -> Self {
        let answer = standing.answer;
        Self {
            name: answer.name,
            threshold: answer.threshold,
            max_nodes: answer.max_nodes,
            by: answer.by,
            risk: answer.risk,
            state: answer.state,
            verdict: answer.answer.map(|answer| answer.verdict),
            detail: answer.detail,
            etag: etag(&standing.tag),
            updated_at: standing.updated_at.to_string(),
        }
    }
}

//! `/v1/networks/{name}/scenarios`

use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use serde::Serialize;
use serde_json::value::RawValue;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::answers::{etag, raw};
use super::{address, json_body, written};
use crate::api::extract::{JsonBody, NoQuery, ResultFormat, network_name, question_name};
use crate::api::pages::{self, Paging};
use crate::api::refusals::{BodyRefusals, ConditionRefusals, Refusals};
use crate::api::representation::{self, Conditions, Validator};
use crate::api::requests::{ChangeBody, read_kept_change};
use crate::api::{ApiError, AppState, Problem};
use crate::service::{QuestionKind, QuestionName, StoredQuestion};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_scenarios)).routes(routes!(put_scenario, get_scenario, delete_scenario))
}

/// A kept what-if.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct KeptScenarioAnswer {
    /// Its name.
    name: String,
    /// What it would change.
    #[schema(value_type = ChangeBody)]
    change: Box<RawValue>,
}

/// A what-if as it is kept now.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct StoredScenarioAnswer {
    /// The what-if.
    #[serde(flatten)]
    scenario: KeptScenarioAnswer,
    /// Strong validator, as in ETag.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// What-ifs, in the order of their names.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct ScenarioPage {
    /// The what-ifs.
    items: Vec<StoredScenarioAnswer>,
}

/// Keep a scenario
///
/// Keeps a what-if, in place of the one of this name: what of the forces would be other than it is. It is set beside the forecast as
/// it stands on demand, at `/v1/networks/{name}/comparison`. A network keeps up to 10 scenarios.
#[utoipa::path(
    put,
    path = "/v1/networks/{name}/scenarios/{scenario}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("scenario" = String, Path, description = "The scenario"),
        ("If-Match" = Option<String>, Header, description = "Only when the scenario has this ETag"),
        ("If-None-Match" = Option<String>, Header, description = "`*`: only when there is no such scenario"),
    ),
    request_body(content = ChangeBody, content_type = "application/json",
        example = json!({"arrivals_factor": 1.2, "degree_cap": {"links": 1000, "refused": "spread"}})),
    responses(
        (status = 200, description = "The scenario, stored in place of another", body = StoredScenarioAnswer),
        (status = 201, description = "A new scenario, stored", body = StoredScenarioAnswer,
            headers(("Location" = String, description = "Where the scenario is"))),
        (status = 409, description = "The network has as many scenarios as it may have", body = Problem,
            content_type = "application/problem+json"),
        Refusals, BodyRefusals, ConditionRefusals,
    )
)]
async fn put_scenario(
    State(state): State<AppState>,
    Path((network, scenario)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let (network, name) = (network_name(&network)?, question_name("scenario", &scenario)?);
    let location = format!("{}/scenarios/{}", address(&network), name.as_str());
    let change = body.read(read_kept_change).await?;
    let allows = move |tag: Option<&str>| conditions.hold(tag);
    let (stored, made) = state.service.put_scenario(network, name, change, allows).await?;
    written(StoredScenarioAnswer::try_from(stored)?, made, &location)
}

/// Read a scenario
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/scenarios/{scenario}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("scenario" = String, Path, description = "The scenario"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the scenario still has this ETag"),
    ),
    responses(
        (status = 200, description = "The scenario", body = KeptScenarioAnswer, headers(
            ("ETag" = String, description = "Strong validator of the scenario"),
            ("Last-Modified" = String, description = "When it was last stored"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals,
    )
)]
async fn get_scenario(
    State(state): State<AppState>,
    Path((network, scenario)): Path<(String, String)>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let name = question_name("scenario", &scenario)?;
    let stored = state.service.scenario(&network_name(&network)?, &name).await?;
    let (tag, modified) = (stored.tag.clone(), Some(stored.updated_at));
    representation::found(Validator { tag: &tag, modified }, ResultFormat::Json, &headers, || {
        json_body(&KeptScenarioAnswer::try_from(stored)?)
    })
}

/// List scenarios
///
/// In the order of their names; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/scenarios",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<String>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of scenarios", body = ScenarioPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_scenarios(
    State(state): State<AppState>,
    Path(name): Path<String>,
    paging: Paging,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let after = paging.after(|cursor| QuestionName::new(cursor).ok())?;
    let (found, more) = state.service.scenarios(&name, after, paging.limit).await?;
    let path = format!("{}/scenarios", address(&name));
    let next = found.last().filter(|_| more).map(|last| paging.next(&path, &last.name));
    let items = found.into_iter().map(StoredScenarioAnswer::try_from).collect::<Result<_, _>>()?;
    pages::page(ScenarioPage { items }, next)
}

/// Delete a scenario
#[utoipa::path(
    delete,
    path = "/v1/networks/{name}/scenarios/{scenario}",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("scenario" = String, Path, description = "The scenario"),
        ("If-Match" = Option<String>, Header, description = "Only when the scenario has this ETag"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_scenario(
    State(state): State<AppState>,
    Path((network, scenario)): Path<(String, String)>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let scenario = (QuestionKind::Scenario, question_name("scenario", &scenario)?);
    state.service.delete_question(network_name(&network)?, scenario, move |tag| conditions.hold(tag)).await?;
    Ok(StatusCode::NO_CONTENT)
}

impl TryFrom<StoredQuestion> for KeptScenarioAnswer {
    type Error = ApiError;

    fn try_from(stored: StoredQuestion) -> Result<Self, ApiError> {
        Ok(Self { name: stored.name, change: raw(stored.body)? })
    }
}

impl TryFrom<StoredQuestion> for StoredScenarioAnswer {
    type Error = ApiError;

    fn try_from(stored: StoredQuestion) -> Result<Self, ApiError> {
        let (etag, updated_at) = (etag(&stored.tag), stored.updated_at.to_string());
        Ok(Self { scenario: stored.try_into()?, etag, updated_at })
    }
}

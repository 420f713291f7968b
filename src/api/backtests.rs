//! `/v1/backtests`: finished backtests of tracked networks.

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use uuid::Uuid;

use super::extract::{BacktestForm, BacktestFormQuery, NoQuery, ResultFormat};
use super::refusals::{ChartRefusals, ConditionRefusals, FormRefusals, Refusals};
use super::representation::{self, Conditions, Content, Validator, header_value};
use super::{ApiError, AppState, runs};
use crate::report;
use crate::service::{BacktestRun, ServiceError, StoredBacktest, Thing};

const PATH: &str = "/v1/backtests";

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(get_backtest, delete_backtest))
}

/// 201 with a backtest and where it is kept.
pub fn created(made: StoredBacktest) -> Result<Response, ApiError> {
    let location = header_value(&format!("{PATH}/{}", made.summary.id))?;
    let state = state_of(&made);
    let represented =
        representation::represented(validator(&made), ResultFormat::Json, Body::from(made.document.clone()))?;
    let mut response = (StatusCode::CREATED, represented).into_response();
    response.headers_mut().insert(header::LOCATION, location);
    response.headers_mut().insert("backtest-state", state);
    Ok(response)
}

/// Read a backtest
///
/// It never changes; Backtest-State says whether what is stored of the network still is what it stands on. When counts it stands on are
/// replaced or deleted, the refresh that follows takes the network's newest backtest on anew.
#[utoipa::path(
    get,
    path = "/v1/backtests/{id}",
    tag = "backtests",
    params(
        ("id" = String, Path, description = "Id of the backtest"),
        BacktestFormQuery,
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the backtest has this ETag"),
    ),
    responses(
        (status = 200, description = "The backtest; as CSV one row a table, periods ahead, threshold and member", headers(
            ("ETag" = String, description = "Strong validator of this form of the backtest"),
            ("Last-Modified" = String, description = "When the backtest was made"),
            ("Backtest-State" = String, description = "`current`: it stands on all that is stored of the network; `outdated`: that \
                changed since"),
        ), content(
            (BacktestRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals, FormRefusals, ChartRefusals,
    )
)]
async fn get_backtest(
    State(state): State<AppState>,
    Path(id): Path<String>,
    form: BacktestForm,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let made = state.service.backtest_run(backtest_id(&id)?).await?;
    let tag = form.tag(&made.tag);
    let validator = Validator { tag: &tag, modified: Some(made.summary.created_at) };
    let (format, state) = (form.format(), state_of(&made));
    let light = format == ResultFormat::Json;
    let drawn = representation::found_drawn(validator, format, &headers, light, move || content(&made, &form));
    let mut response = drawn.await?;
    response.headers_mut().insert("backtest-state", state);
    Ok(response)
}

/// Delete a backtest
#[utoipa::path(
    delete,
    path = "/v1/backtests/{id}",
    tag = "backtests",
    params(
        ("id" = String, Path, description = "Id of the backtest"),
        ("If-Match" = Option<String>, Header, description = "Delete only when the backtest has this ETag"),
    ),
    responses((status = 204, description = "It is gone"), Refusals, ConditionRefusals)
)]
async fn delete_backtest(
    State(state): State<AppState>,
    Path(id): Path<String>,
    _query: NoQuery,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    state.service.delete_backtest(backtest_id(&id)?, move |tag| conditions.hold(Some(tag))).await?;
    Ok(StatusCode::NO_CONTENT)
}

/// Reads an id from a path; what is no id belongs to no backtest.
fn backtest_id(text: &str) -> Result<Uuid, ApiError> {
    Uuid::try_parse(text).map_err(|_| ServiceError::NotFound(Thing::Backtest).into())
}

fn validator(made: &StoredBacktest) -> Validator<'_> {
    Validator { tag: &made.tag, modified: Some(made.summary.created_at) }
}

fn state_of(made: &StoredBacktest) -> HeaderValue {
    HeaderValue::from_static(if made.summary.outdated { "outdated" } else { "current" })
}

fn content(made: &StoredBacktest, form: &BacktestForm) -> Result<Content, ApiError> {
    let read = || -> Result<BacktestRun, ApiError> { runs::read(&made.document) };
    Ok(match form {
        BacktestForm::Json => Content::json(made.document.clone()),
        BacktestForm::Csv => Content::csv(report::backtest_csv(&read()?))?,
        BacktestForm::Svg(theme) => Content::markup(report::backtest_chart(&read()?, *theme)?.svg),
        BacktestForm::Html(form) => {
            let again = format!("{}{PATH}/{}", form.service, made.summary.id);
            Content::markup(report::backtest_page(&read()?, &again, form.theme)?)
        }
    })
}

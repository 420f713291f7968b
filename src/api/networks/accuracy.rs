//! `/v1/networks/{name}/accuracy`

use axum::body::Body;
use axum::extract::{Path, State};
use axum::http::HeaderMap;
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::extract::{TableFormat, network_name};
use crate::api::refusals::{FormRefusals, Refusals};
use crate::api::representation::{self, Validator};
use crate::api::{ApiError, AppState};
use crate::report;
use crate::service::{AccuracyAnswer, sha256_hex};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(get_accuracy))
}

/// Read how a network's forecasts did
///
/// Each forecast that a refresh issued against the snapshots that came later, with a verdict in words and a warning when outcomes
/// miss their intervals more often than they should. Forecasts that were asked for by POST are what-ifs and not accounted for. A
/// snapshot is held against the 24 last issued forecasts whose dates reach it.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/accuracy",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("format" = inline(Option<TableFormat>), Query, description = "Goes before Accept"),
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the report still has this ETag"),
    ),
    responses(
        (status = 200, description = "The report; as CSV one row a forecast, date and threshold", headers(
            ("ETag" = String, description = "Strong validator of this form of the report"),
        ), content(
            (AccuracyAnswer = "application/json"),
            (String = "text/csv"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals, FormRefusals,
    )
)]
async fn get_accuracy(
    State(state): State<AppState>,
    Path(name): Path<String>,
    format: TableFormat,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let report = state.service.accuracy(&network_name(&name)?).await?;
    let text = serde_json::to_string(&report).map_err(|error| ApiError::Broken(error.to_string()))?;
    let validator = Validator { tag: &sha256_hex(text.as_bytes()), modified: None };
    representation::found(validator, format.into(), &headers, || match format {
        TableFormat::Json => Ok(Body::from(text)),
        TableFormat::Csv => {
            report::accuracy_csv(&report).map(Body::from).map_err(|error| ApiError::Broken(error.to_string()))
        }
    })
}

//! Health, readiness, metrics.

use axum::extract::State;
use axum::http::{HeaderValue, header};
use axum::response::{IntoResponse, Response};
use jiff::Timestamp;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::problem::Problem;
use super::{ApiError, AppState};
use crate::report::gauges_text;

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(livez)).routes(routes!(readyz)).routes(routes!(metrics))
}

/// Is the process alive?
#[utoipa::path(get, path = "/livez", tag = "operation", responses(
    (status = 200, description = "It is", body = String, content_type = "text/plain"),
))]
async fn livez() -> Response {
    plain("alive\n")
}

/// Can it serve requests?
///
/// The database answers, its tables are those of this version, it can be written, and the process is not about to stop. Otherwise
/// `code` says what is wrong: `store_full`, `store_read_only`, `store_missing`, `store_corrupt`, `store_busy`, `store_unavailable`,
/// `not_ready` (tables), or `stopping`.
#[utoipa::path(get, path = "/readyz", tag = "operation", responses(
    (status = 200, description = "It can", body = String, content_type = "text/plain"),
    (status = 503, description = "Not now: the database cannot be read or written, its tables are not those of this version, or the process is about to stop", body = Problem, content_type = "application/problem+json"),
))]
async fn readyz(State(state): State<AppState>) -> Result<Response, ApiError> {
    state.service.check_ready().await?;
    Ok(plain("ready\n"))
}

/// Metrics
///
/// Prometheus text exposition: of the process, and of each network's latest forecast and limits, within the bounds of the settings
/// under `metrics`. `tailcast_forecast_gauges_up` is 0 when the database could not be read, and those of forecasts are missing.
#[utoipa::path(get, path = "/metrics", tag = "operation", responses(
    (status = 200, description = "The metrics", body = String, content_type = "text/plain; version=0.0.4"),
))]
async fn metrics(State(state): State<AppState>) -> Response {
    let gauges = state.service.forecast_gauges(state.gauges, Timestamp::now()).await;
    if let Err(error) = &gauges {
        tracing::warn!(%error, "the metrics are told without those of forecasts");
    }
    let mut response = plain("");
    *response.body_mut() = (state.metrics.render() + &gauges_text(gauges.ok().as_ref())).into();
    let kind = HeaderValue::from_static("text/plain; version=0.0.4; charset=utf-8");
    response.headers_mut().insert(header::CONTENT_TYPE, kind);
    response
}

fn plain(text: &'static str) -> Response {
    ([(header::CACHE_CONTROL, "no-store")], text).into_response()
}

//! Runs from all that is stored of a network.

use axum::extract::{Path, State};
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::extract::{
    FitForm, FitFormQuery, ForecastForm, ForecastFormQuery, IdempotencyKey, JsonBody, network_name,
};
use crate::api::refusals::{BodyRefusals, FormRefusals, Refusals};
use crate::api::requests::{NetworkFitBody, NetworkForecastBody, read_network_fit, read_network_forecast};
use crate::api::{ApiError, AppState, Problem, examples, fits, forecasts, runs};
use crate::service::{FitRun, ForecastRun, NetworkEvidence};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(create_network_forecast)).routes(routes!(create_network_fit))
}

/// Forecast a tracked network
///
/// A forecast from all that is stored of the network: its snapshots, transitions and link events. What is left out comes from its
/// `forecast_plan`, if it has one; what is given goes before the plan, for this run only. The run is one of
/// `/v1/forecasts` and stays when the network goes.
#[utoipa::path(
    post,
    path = "/v1/networks/{name}/forecasts",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ForecastFormQuery,
        ("Idempotency-Key" = Option<String>, Header, min_length = 1, max_length = 255,
            description = "Requests with the same key and body for the same network are one and the same: the run is made \
                           once, from what was stored then."),
    ),
    request_body(content = NetworkForecastBody, content_type = "application/json", example = examples::network_forecast),
    responses(
        (status = 201, description = "The run, kept", headers(
            ("Location" = String, description = "Where the run is kept"),
            ("ETag" = String, description = "Strong validator of this form of the run"),
            ("Last-Modified" = String, description = "When the run was made"),
        ), content(
            (ForecastRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 409, description = "The key came before with another body", body = Problem,
            content_type = "application/problem+json"),
        (status = 422, description = "Nothing is stored to start from, no forecast follows from it, or none of what the chart shows; \
            the detail says what would help", body = Problem, content_type = "application/problem+json"),
        Refusals, FormRefusals, BodyRefusals,
    )
)]
async fn create_network_forecast(
    State(state): State<AppState>,
    Path(name): Path<String>,
    form: ForecastForm,
    key: IdempotencyKey,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let (name, limits) = (network_name(&name)?, state.limits);
    let claim = key.claim_for(&name, &body);
    let NetworkEvidence { evidence, plan, limits: kept, origin, place: _place, .. } =
        state.service.evidence(&name).await?;
    let inputs = body
        .read(move |raw, faults| read_network_forecast(raw, evidence, (plan.as_ref(), kept), &limits, faults))
        .await?;
    let run = state.service.create(inputs, Some(origin), claim).await?;
    runs::created(forecasts::PATH, run, form).await
}

/// Fit a tracked network
///
/// A fit to all that is stored of the network. The run is one of `/v1/fits` and stays when the network goes.
#[utoipa::path(
    post,
    path = "/v1/networks/{name}/fits",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        FitFormQuery,
        ("Idempotency-Key" = Option<String>, Header, min_length = 1, max_length = 255,
            description = "Requests with the same key and body for the same network are one and the same: the run is made \
                           once, from what was stored then."),
    ),
    request_body(content = NetworkFitBody, content_type = "application/json", example = examples::network_fit),
    responses(
        (status = 201, description = "The run, kept", headers(
            ("Location" = String, description = "Where the run is kept"),
            ("ETag" = String, description = "Strong validator of this form of the run"),
            ("Last-Modified" = String, description = "When the run was made"),
        ), content(
            (FitRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 409, description = "The key came before with another body", body = Problem,
            content_type = "application/problem+json"),
        (status = 422, description = "Nothing is stored to fit, no fit follows from it, or none of what the chart shows; the detail \
            says what would help",
            body = Problem, content_type = "application/problem+json"),
        Refusals, FormRefusals, BodyRefusals,
    )
)]
async fn create_network_fit(
    State(state): State<AppState>,
    Path(name): Path<String>,
    form: FitForm,
    key: IdempotencyKey,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let name = network_name(&name)?;
    let claim = key.claim_for(&name, &body);
    let NetworkEvidence { evidence, origin, place: _place, .. } = state.service.evidence(&name).await?;
    let inputs = body.read(move |raw, faults| read_network_fit(raw, evidence, faults)).await?;
    let run = state.service.create(inputs, Some(origin), claim).await?;
    runs::created(fits::PATH, run, form).await
}

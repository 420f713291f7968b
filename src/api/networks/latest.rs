//! `/v1/networks/{name}/forecasts/latest`

use axum::extract::{Path, State};
use axum::http::{HeaderMap, HeaderValue, header};
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::extract::{ForecastForm, ForecastFormQuery, network_name};
use crate::api::refusals::{ChartRefusals, FormRefusals, Refusals};
use crate::api::representation::header_value;
use crate::api::{ApiError, AppState, forecasts, jobs, runs};
use crate::service::ForecastRun;

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(get_latest_forecast))
}

/// Read a network's latest forecast
///
/// The forecast by the network's plan from what is stored of it: made anew, in the background, whenever that changes. Forecast-State
/// says whether it stands on all that is stored; Link leads to the refresh that says so, with its reason where no newer forecast
/// could be made. Cheap to poll.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/forecasts/latest",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ForecastFormQuery,
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when this ETag is still the latest"),
    ),
    responses(
        (status = 200, description = "The latest forecast", headers(
            ("ETag" = String, description = "Strong validator of this form of the run"),
            ("Last-Modified" = String, description = "When the run was made"),
            ("Content-Location" = String, description = "Where this very run stays"),
            ("Forecast-State" = String, description = "`current`: it stands on all that is stored; `refreshing`: another is being \
                made; `outdated`: no newer one could be made"),
            ("Link" = String, description = "The refresh that the state comes from, rel=\"describedby\""),
        ), content(
            (ForecastRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 304, description = "The client has it already"),
        Refusals, FormRefusals, ChartRefusals,
    )
)]
async fn get_latest_forecast(
    State(state): State<AppState>,
    Path(name): Path<String>,
    form: ForecastForm,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let latest = state.service.latest_forecast(&network_name(&name)?).await?;
    let place = header_value(&format!("{}/{}", forecasts::PATH, latest.run.id))?;
    let refresh = header_value(&format!("<{}/{}>; rel=\"describedby\"", jobs::PATH, latest.job))?;
    let mut response = runs::found(latest.run, form, &headers)?;
    let told = response.headers_mut();
    told.insert(header::CONTENT_LOCATION, place);
    told.insert("forecast-state", HeaderValue::from_static(latest.state.as_str()));
    told.insert(header::LINK, refresh);
    Ok(response)
}

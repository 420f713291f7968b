//! `/v1/networks/{name}/forecasts/latest`

use axum::extract::{Path, State};
use axum::http::HeaderMap;
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::extract::{ForecastForm, ForecastFormQuery, network_name};
use crate::api::refusals::{ChartRefusals, FormRefusals, Refusals};
use crate::api::{ApiError, AppState};
use crate::service::ForecastRun;

/// Where a network's latest forecast is.
pub const ROUTE: &str = "/v1/networks/{name}/forecasts/latest";

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
            ("Cache-Control" = String, description = "For how long it may be used without asking: a hundredth of the time between the \
                network's newest snapshots (or else of the plan's `every`), at most an hour; not at all while `refreshing`"),
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
    state.polled.copy(&network_name(&name)?).await?.answer(form, &headers).await
}

/// The network whose latest forecast a path leads to, as it stands there; none when it leads elsewhere.
pub fn polled_network(path: &str) -> Option<&str> {
    let (before, after) = ROUTE.split_once("{name}")?;
    path.strip_prefix(before)?.strip_suffix(after).filter(|name| !name.contains('/'))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_path_of_a_latest_forecast_is_told_from_others() {
        for (path, network) in [
            ("/v1/networks/heronsgate/forecasts/latest", Some("heronsgate")),
            ("/v1/networks//forecasts/latest", Some("")),
            ("/v1/networks/a/b/forecasts/latest", None),
            ("/v1/networks/forecasts/latest", None),
            ("/v1/networks/heronsgate/forecasts", None),
            ("/v1/forecasts/latest", None),
        ] {
            assert_eq!(polled_network(path), network, "{path}");
        }
    }
}

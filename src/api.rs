//! HTTP: routes, extractors, one error table, request and answer forms.
//!
//! A handler takes apart a request, makes one service call and puts together a response; everything that can go wrong
//! is an [`ApiError`], which the outermost layer answers as a problem document.

mod access;
mod admission;
mod audit;
mod backtests;
mod decode;
mod docs;
mod error;
mod examples;
mod extract;
mod fits;
mod forecasts;
mod jobs;
mod networks;
mod observe;
mod pages;
mod polled;
mod probes;
mod problem;
mod refusals;
mod representation;
mod requests;
mod runs;
mod streams;
mod web;
mod webhooks;

use std::sync::Arc;
use std::time::Instant;

use axum::http::{HeaderMap, Method, Uri};
use axum::middleware;
use axum::response::{IntoResponse, Response};
use axum::{Extension, Router};
use metrics_exporter_prometheus::PrometheusHandle;
use tower_http::catch_panic::CatchPanicLayer;
use utoipa::openapi::OpenApi;
use utoipa_axum::router::OpenApiRouter;

use crate::config::{Config, HttpConfig, JobsConfig, LimitsConfig};
use crate::service::{GaugeCaps, Service};
use access::Access;
use admission::{Admission, Uploads};
use observe::Observation;
use polled::Polled;
use streams::Streams;

pub use access::{RULES as ACCESS_RULES, Rule as AccessRule};
pub use error::ApiError;
pub use examples::forecast_request as example_request;
pub use extract::{faultless, read_json};
pub use problem::Problem;
pub use requests::{
    ArrivalsBody, BacktestBody, CHANGE_FIELDS, CampaignBody, DegreeKindName, EVIDENCE_FIELDS, FIT_FIELDS,
    FORECAST_FIELDS, FitRequestBody, FixedBody, ForecastRequestBody, HorizonBody, LIMIT_FIELDS, LinkEventsBody,
    ModelName, NETWORK_FIELDS, NOTICE_FIELDS, SegmentBody, SnapshotBody, TransitionsBody, WindowBody, read_backtest,
    read_fit, read_forecast, read_kept_change, read_kept_limit, read_link_events, read_network, read_network_fit,
    read_network_forecast, read_notice, read_snapshot, read_snapshot_csv, read_source, read_transitions,
    read_transitions_csv,
};

/// What handlers share.
#[derive(Clone)]
pub struct AppState {
    /// The use cases.
    pub service: Service,
    /// Limits of the HTTP side.
    pub http: Arc<HttpConfig>,
    /// Limits of one request's content.
    pub limits: LimitsConfig,
    /// Limits of work that outlasts its request.
    pub jobs: JobsConfig,
    /// The process's metrics.
    pub metrics: PrometheusHandle,
    /// How much is told of forecasts among them.
    pub gauges: GaugeCaps,
    /// Places for streams of events.
    pub streams: Streams,
    /// Places for link lists under way.
    pub uploads: Uploads,
    /// Copies of latest forecasts.
    pub polled: Polled,
    /// Who may ask for what.
    pub access: Access,
}

impl AppState {
    /// What handlers share, by the settings.
    pub fn new(service: Service, config: &Config, metrics: PrometheusHandle) -> Self {
        let told = config.metrics;
        Self {
            access: Access::new(service.clone(), config),
            polled: Polled::new(service.clone(), config.http.polled_bytes),
            uploads: Uploads::new(&config.jobs, service.clone()),
            service,
            http: Arc::new(config.http.clone()),
            limits: config.limits,
            jobs: config.jobs,
            metrics,
            gauges: GaugeCaps { networks: told.networks, thresholds: told.thresholds, limits: told.limits },
            streams: Streams::new(&config.http),
        }
    }
}

/// All that is served: polls of latest forecasts from memory, and everything else by its route.
#[derive(Clone)]
pub struct Front {
    polled: Polled,
    access: Access,
    service: Service,
    router: Router,
}

impl Front {
    /// The whole of the service.
    pub fn new(state: AppState) -> Self {
        let (polled, access, service) = (state.polled.clone(), state.access.clone(), state.service.clone());
        Self { polled, access, service, router: router(state) }
    }

    /// The answer to a request that can be answered without waiting for anything; it takes no place of `http.max_in_flight`.
    pub fn at_once(&self, method: &Method, uri: &Uri, headers: &HeaderMap) -> Option<Response> {
        self.polled.at_once(method, uri, headers, &self.access)
    }

    /// The refusal of a request that comes by a connection more than there may be, unless whoever runs the service asks how it is:
    /// what stands outside of /v1 is always answered.
    pub fn refused(&self, method: &Method, uri: &Uri, headers: &HeaderMap) -> Option<Response> {
        if !uri.path().starts_with("/v1/") {
            return None;
        }
        let started = Instant::now();
        let mut refusal = ApiError::TooManyConnections.into_response();
        Observation::begin(started, method, "unmatched", uri.path(), headers).finish(&mut refusal);
        Some(refusal)
    }

    /// Whether the process is about to stop: answers ask clients to connect anew.
    pub fn is_parting(&self) -> bool {
        self.service.is_stopping()
    }

    /// The routes, for what is not answered at once.
    pub fn router(&self) -> Router {
        self.router.clone()
    }
}

/// Every route with every layer around it.
fn router(state: AppState) -> Router {
    let admission = Admission::new(&state.http, state.service.clone());
    let (work, _) = work_routes().split_for_parts();
    let work = work.layer(middleware::from_fn_with_state(admission, admission::admit));
    let (around, _) = around_routes().split_for_parts();
    let document = docs::DocumentText(openapi_text().into());
    let routes = work.merge(around).merge(docs::pages()).merge(web::routes()).layer(Extension(document));
    // Whoever may not ask takes no place, and whoever asks first what is allowed needs no key.
    let routes = routes.layer(middleware::from_fn_with_state(state.access.clone(), access::guard));
    let routes = match access::cors(&state.http.allowed_origins) {
        Some(cors) => routes.layer(cors),
        None => routes,
    };
    observed(routes).with_state(state)
}

/// Routes with the outermost layers: whatever happens inside, a response leaves, and an error leaves as a problem.
fn observed<S: Clone + Send + Sync + 'static>(routes: Router<S>) -> Router<S> {
    routes.layer(CatchPanicLayer::new()).layer(middleware::from_fn(observe::observe))
}

/// The OpenAPI document; needs no database and no configuration.
pub fn openapi() -> OpenApi {
    let routes = OpenApiRouter::with_openapi(docs::preamble()).merge(work_routes()).merge(around_routes());
    let document = docs::with_constraints(routes.into_openapi());
    access::with_access(webhooks::with_webhooks(document))
}

/// The OpenAPI document as it is served and committed.
pub fn openapi_text() -> String {
    // It is made of constants; a test reads it back.
    openapi().to_pretty_json().map(|text| text + "\n").unwrap_or_default()
}

/// Routes that do the service's work, and count against `http.max_in_flight`.
fn work_routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new()
        .merge(forecasts::routes())
        .merge(fits::routes())
        .merge(networks::routes())
        .merge(backtests::routes())
        .merge(jobs::routes())
        .merge(audit::routes())
}

/// Routes that must answer however busy the others are.
fn around_routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().merge(probes::routes()).merge(docs::routes())
}

#[cfg(test)]
mod tests {
    use axum::routing::get;
    use tokio::net::TcpListener;

    use super::*;

    async fn panics() -> &'static str {
        std::panic::panic_any("a secret")
    }

    #[tokio::test]
    async fn a_panic_leaves_as_a_problem_that_gives_nothing_away() {
        let routes = Router::new().route("/", get(panics));
        let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
        let address = listener.local_addr().unwrap();
        tokio::spawn(async move { axum::serve(listener, observed::<()>(routes)).await });
        let client = reqwest::Client::builder().no_proxy().build().unwrap();
        let response = client.get(format!("http://{address}/")).send().await.unwrap();
        assert_eq!(response.status().as_u16(), 500);
        assert_eq!(response.headers()["content-type"], "application/problem+json");
        let text = response.text().await.unwrap();
        assert!(text.contains("\"code\":\"internal\"") && !text.contains("secret"), "{text}");
    }
}

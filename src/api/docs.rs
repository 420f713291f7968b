//! The OpenAPI document and a viewer for it; neither loads anything from a network.

mod constraints;

use axum::body::Bytes;
use axum::extract::Request;
use axum::http::{HeaderValue, header};
use axum::middleware::{self, Next};
use axum::response::{IntoResponse, Response};
use axum::{Extension, Router};
use utoipa::OpenApi as _;
use utoipa::openapi::OpenApi;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use utoipa_swagger_ui::{Config, SwaggerUi};

use super::AppState;

pub use constraints::with_constraints;

/// What the pages may load: themselves alone. The viewer styles inline and draws images from data addresses.
const PAGE_POLICY: &str = "default-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; \
                           frame-ancestors 'none'; base-uri 'none'";

/// Title, version and preamble of the document.
#[derive(utoipa::OpenApi)]
#[openapi(
    info(
        title = "tailcast",
        description = "Forecasts how many hubs (nodes with at least a given number of links) a growing network will \
                       have, and how sure that is.\n\nEvery error is an RFC 9457 problem document with a stable code, \
                       the request's id, and for wrong input the place of every fault. Every response carries \
                       X-Request-Id; a traceparent header is honoured. HEAD works wherever GET does.\n\nA forecast \
                       says what to expect if the network goes on as described, not what will happen. Where a \
                       capacity failure could harm people, your own engineering practice comes first.",
        license(name = "MIT OR Apache-2.0", identifier = "MIT OR Apache-2.0")
    ),
    tags(
        (name = "forecasts", description = "Hubs at future dates"),
        (name = "fits", description = "The attachment mix alone"),
        (name = "networks", description = "Tracked networks, and runs from what is stored of them"),
        (name = "backtests", description = "What would have been forecast at past snapshots, against what came"),
        (name = "jobs", description = "Work that outlasts its request"),
        (name = "operation", description = "Health, readiness, metrics, this document"),
    )
)]
struct Preamble;

/// The document before any route adds itself.
pub fn preamble() -> OpenApi {
    Preamble::openapi()
}

/// The routes of this resource that the document lists.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(openapi_json))
}

/// The viewer, which the document does not list.
pub fn pages() -> Router<AppState> {
    let viewer = Config::from("/openapi.json").validator_url("none").try_it_out_enabled(true);
    Router::new().merge(SwaggerUi::new("/docs").config(viewer)).route_layer(middleware::from_fn(with_page_policy))
}

/// The document's text, made once.
#[derive(Clone)]
pub struct DocumentText(pub Bytes);

/// This document
#[utoipa::path(get, path = "/openapi.json", tag = "operation", responses(
    (status = 200, description = "OpenAPI 3.1", body = Object, content_type = "application/json"),
))]
async fn openapi_json(Extension(DocumentText(text)): Extension<DocumentText>) -> Response {
    ([(header::CONTENT_TYPE, "application/json"), (header::CACHE_CONTROL, "no-cache")], text).into_response()
}

async fn with_page_policy(request: Request, next: Next) -> Response {
    let mut response = next.run(request).await;
    response.headers_mut().insert(header::CONTENT_SECURITY_POLICY, HeaderValue::from_static(PAGE_POLICY));
    response
}

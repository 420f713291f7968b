//! The OpenAPI document and a viewer for it; neither loads anything from a network.

use std::sync::Arc;

use axum::extract::Request;
use axum::http::{HeaderValue, header};
use axum::middleware::{self, Next};
use axum::response::{IntoResponse, Response};
use axum::{Extension, Router};
use serde_json::json;
use utoipa::OpenApi as _;
use utoipa::openapi::path::ParameterIn;
use utoipa::openapi::{OpenApi, RefOr, Schema};
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use utoipa_swagger_ui::{Config, SwaggerUi};

use super::AppState;

/// What the pages may load: themselves alone. The viewer styles inline and draws images from data addresses.
const PAGE_POLICY: &str = "default-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; \
                           frame-ancestors 'none'; base-uri 'none'";

/// Parts of a path that callers name.
const NAMES: [&str; 4] = ["name", "limit", "scenario", "notice"];
/// What such a name looks like; `NetworkName` and its like read it.
const NAME_PATTERN: &str = "^[A-Za-z0-9][A-Za-z0-9._~-]*$";
const MOST_NAME_CHARS: usize = 100;

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

/// Says which fields exclude each other, in the one form that can be put beside properties: exactly one of them is
/// required.
pub fn with_exclusive_fields(mut document: OpenApi) -> OpenApi {
    let Some(components) = document.components.as_mut() else { return document };
    let exclusive = [
        ("ForecastRequestBody", vec!["dates", "horizon"]),
        ("ArrivalsBody", vec!["per_day", "segments", "csv"]),
        ("HorizonBody", vec!["until", "ends_after"]),
    ];
    // Neither is required where a plan has dates.
    if let Some(RefOr::T(Schema::Object(body))) = components.schemas.get_mut("NetworkForecastBody") {
        let both = json!({"required": ["dates", "horizon"]});
        body.extensions.get_or_insert_default().insert("not".to_owned(), both);
    }
    for (name, fields) in exclusive {
        if let Some(RefOr::T(Schema::Object(body))) = components.schemas.get_mut(name) {
            let one_of: Vec<_> = fields.iter().map(|field| json!({"required": [field]})).collect();
            body.extensions.get_or_insert_default().insert("oneOf".to_owned(), one_of.into());
        }
    }
    document
}

/// Says of what form the names in a path are, wherever they stand.
pub fn with_name_forms(mut document: OpenApi) -> OpenApi {
    let operations = document.paths.paths.values_mut().flat_map(|item| {
        [&mut item.get, &mut item.put, &mut item.post, &mut item.delete].into_iter().filter_map(Option::as_mut)
    });
    for parameter in operations.flat_map(|operation| operation.parameters.iter_mut().flatten()) {
        let RefOr::T(parameter) = parameter else { continue };
        let named = parameter.parameter_in == ParameterIn::Path && NAMES.contains(&parameter.name.as_str());
        if let (true, Some(RefOr::T(Schema::Object(form)))) = (named, parameter.schema.as_mut()) {
            (form.max_length, form.pattern) = (Some(MOST_NAME_CHARS), Some(NAME_PATTERN.to_owned()));
        }
    }
    document
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
pub struct DocumentText(pub Arc<str>);

/// This document
#[utoipa::path(get, path = "/openapi.json", tag = "operation", responses(
    (status = 200, description = "OpenAPI 3.1", body = Object, content_type = "application/json"),
))]
async fn openapi_json(Extension(DocumentText(text)): Extension<DocumentText>) -> Response {
    ([(header::CONTENT_TYPE, "application/json"), (header::CACHE_CONTROL, "no-cache")], text.to_string())
        .into_response()
}

async fn with_page_policy(request: Request, next: Next) -> Response {
    let mut response = next.run(request).await;
    response.headers_mut().insert(header::CONTENT_SECURITY_POLICY, HeaderValue::from_static(PAGE_POLICY));
    response
}

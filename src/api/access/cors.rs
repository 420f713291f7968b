//! Pages of other origins (the Fetch standard's CORS protocol): none may ask, but for those that are listed.

use std::time::Duration;

use axum::http::header::{
    ACCEPT, AUTHORIZATION, CONTENT_ENCODING, CONTENT_LOCATION, CONTENT_TYPE, ETAG, IF_MATCH, IF_NONE_MATCH, LINK,
    LOCATION, RETRY_AFTER, WWW_AUTHENTICATE,
};
use axum::http::{HeaderName, HeaderValue, Method};
use tower_http::cors::CorsLayer;

/// How long a browser may go on without asking again what is allowed.
const MAX_AGE: Duration = Duration::from_secs(3600);

/// What listed origins are told; none when none is listed. Cookies are never taken, so credentials are not allowed.
pub fn cors(origins: &[String]) -> Option<CorsLayer> {
    if origins.is_empty() {
        return None;
    }
    let listed = origins.iter().filter_map(|origin| HeaderValue::from_str(origin).ok());
    let named = HeaderName::from_static;
    let layer = CorsLayer::new()
        .allow_origin(listed.collect::<Vec<_>>())
        .allow_methods([Method::GET, Method::HEAD, Method::POST, Method::PUT, Method::DELETE])
        .allow_headers([
            ACCEPT,
            AUTHORIZATION,
            CONTENT_ENCODING,
            CONTENT_TYPE,
            IF_MATCH,
            IF_NONE_MATCH,
            named("idempotency-key"),
            named("last-event-id"),
            named("prefer"),
            named("traceparent"),
            named("x-request-id"),
        ])
        .expose_headers([
            CONTENT_LOCATION,
            ETAG,
            LINK,
            LOCATION,
            RETRY_AFTER,
            WWW_AUTHENTICATE,
            named("backtest-state"),
            named("forecast-state"),
            named("preference-applied"),
            named("ratelimit"),
            named("ratelimit-policy"),
            named("x-request-id"),
        ])
        .max_age(MAX_AGE);
    Some(layer)
}

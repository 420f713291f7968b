//! The planner's page at `/` and its files under `/assets/`, which the document does not list.

use std::sync::Arc;

use axum::Router;
use axum::http::{HeaderMap, HeaderName, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use axum::routing::get;
use sha2::{Digest, Sha256};

use super::AppState;
use super::representation::is_unmodified;
use crate::report::{WebFile, web_files};

/// What the page may do: run its own scripts, show its own pictures and those it read itself, ask this service.
const POLICY: &str = "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' blob:; connect-src 'self'; \
                      form-action 'none'; base-uri 'none'; frame-ancestors 'none'";

const PAGE: &str = "index.html";

/// The routes of the page.
pub fn routes() -> Router<AppState> {
    web_files().iter().fold(Router::new(), |routes, file| {
        let path = if file.name == PAGE { "/".to_owned() } else { format!("/assets/{}", file.name) };
        let tag: Arc<str> = entity_tag(file.text).into();
        routes.route(&path, get(move |headers: HeaderMap| async move { serve(file, &tag, &headers) }))
    })
}

/// The file, or 304 when the browser has it: after an upgrade of the service no file of another version is used.
fn serve(file: &WebFile, tag: &str, asked: &HeaderMap) -> Response {
    let mut response = if is_unmodified(asked, tag, None) {
        StatusCode::NOT_MODIFIED.into_response()
    } else {
        ([(header::CONTENT_TYPE, file.media_type)], file.text).into_response()
    };
    let headers: [(HeaderName, &'static str); 4] = [
        (header::CACHE_CONTROL, "no-cache"),
        (header::CONTENT_SECURITY_POLICY, POLICY),
        (header::X_CONTENT_TYPE_OPTIONS, "nosniff"),
        (header::REFERRER_POLICY, "no-referrer"),
    ];
    for (name, value) in headers {
        response.headers_mut().insert(name, HeaderValue::from_static(value));
    }
    if let Ok(tag) = HeaderValue::from_str(tag) {
        response.headers_mut().insert(header::ETAG, tag);
    }
    response
}

fn entity_tag(text: &str) -> String {
    let digest: String = Sha256::digest(text.as_bytes()).iter().map(|byte| format!("{byte:02x}")).collect();
    format!("\"{digest}\"")
}

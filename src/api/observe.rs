//! The outermost layer: request id, span, metrics, and problem documents for whatever went wrong inside.

use std::time::Instant;

use axum::extract::{MatchedPath, Request};
use axum::http::{HeaderMap, HeaderName, HeaderValue, Method, StatusCode, header};
use axum::middleware::Next;
use axum::response::Response;
use metrics::{counter, histogram};
use tracing::{Instrument, Span, field, info_span};
use uuid::Uuid;

use super::problem::{Pending, Problem};

const REQUEST_ID: HeaderName = HeaderName::from_static("x-request-id");
/// Longest incoming request id that is kept.
const MAX_REQUEST_ID_CHARS: usize = 128;

/// Media type of problem documents.
pub const PROBLEM_JSON: HeaderValue = HeaderValue::from_static("application/problem+json");

/// Wraps every request.
pub async fn observe(request: Request, next: Next) -> Response {
    let started = Instant::now();
    let id = request_id(request.headers());
    let method = method_label(request.method());
    // The matched path, never the raw one: a label must not take whatever a client types.
    let route = request.extensions().get::<MatchedPath>().map_or("unmatched", MatchedPath::as_str).to_owned();
    let path = request.uri().path().to_owned();
    let span = request_span(&id, method, &path, request.headers());
    let mut response = next.run(request).instrument(span.clone()).await;
    let _entered = span.enter();
    span.record("status", response.status().as_u16());
    complete_problem(&mut response, &id, &path);
    let headers = response.headers_mut();
    if let Ok(value) = HeaderValue::from_str(&id) {
        headers.insert(REQUEST_ID, value);
    }
    headers.insert(header::X_CONTENT_TYPE_OPTIONS, HeaderValue::from_static("nosniff"));
    let status = response.status().as_u16().to_string();
    counter!("tailcast_http_requests_total", "method" => method, "route" => route.clone(), "status" => status)
        .increment(1);
    histogram!("tailcast_http_request_seconds", "method" => method, "route" => route).record(started.elapsed());
    tracing::info!(elapsed_us = started.elapsed().as_micros(), "served");
    response
}

/// Turns an error of any layer into a problem document, and logs what the client is not told.
fn complete_problem(response: &mut Response, id: &str, path: &str) {
    let status = response.status();
    let pending = response.extensions_mut().remove::<Pending>();
    if !(status.is_client_error() || status.is_server_error()) {
        return;
    }
    let problem = match pending {
        Some(Pending(problem)) => problem.completed(id, path),
        None => Problem::of_status(status).completed(id, path),
    };
    if status == StatusCode::SERVICE_UNAVAILABLE {
        // Turned away under load, or with a database to be mended: nothing of ours is broken.
        tracing::warn!(code = problem.code(), cause = problem.cause(), "turned away");
    } else if status.is_server_error() {
        tracing::error!(code = problem.code(), cause = problem.cause(), "failed");
    } else {
        tracing::debug!(code = problem.code(), detail = problem.detail(), "refused");
    }
    *response.body_mut() = problem.to_body();
    let headers = response.headers_mut();
    headers.remove(header::CONTENT_LENGTH);
    headers.insert(header::CONTENT_TYPE, PROBLEM_JSON);
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("no-store"));
}

/// The client's id when it is short and plain, a new one otherwise.
fn request_id(headers: &HeaderMap) -> String {
    let plain = |byte: u8| byte.is_ascii_alphanumeric() || b"-_.:".contains(&byte);
    let given = headers.get(REQUEST_ID).and_then(|value| value.to_str().ok());
    match given {
        Some(id) if (1..=MAX_REQUEST_ID_CHARS).contains(&id.len()) && id.bytes().all(plain) => id.to_owned(),
        _ => Uuid::now_v7().to_string(),
    }
}

fn request_span(id: &str, method: &'static str, path: &str, headers: &HeaderMap) -> Span {
    let span = info_span!(
        "request",
        id,
        method,
        path,
        status = field::Empty,
        trace_id = field::Empty,
        parent_id = field::Empty
    );
    let traceparent = headers.get("traceparent").and_then(|value| value.to_str().ok());
    if let Some((trace_id, parent_id)) = traceparent.and_then(parse_traceparent) {
        span.record("trace_id", trace_id);
        span.record("parent_id", parent_id);
    }
    span
}

/// Trace and parent ids of a W3C traceparent header of version 00 (or of a later one that begins like it).
fn parse_traceparent(text: &str) -> Option<(&str, &str)> {
    let lower_hex = |part: &str, length: usize| {
        part.len() == length && part.bytes().all(|byte| byte.is_ascii_digit() || (b'a'..=b'f').contains(&byte))
    };
    let mut parts = text.split('-');
    let (version, trace_id, parent_id, flags) = (parts.next()?, parts.next()?, parts.next()?, parts.next()?);
    let well_formed = lower_hex(version, 2)
        && version != "ff"
        && (version != "00" || parts.next().is_none())
        && lower_hex(trace_id, 32)
        && lower_hex(parent_id, 16)
        && lower_hex(flags, 2);
    let present = |id: &str| id.bytes().any(|byte| byte != b'0');
    (well_formed && present(trace_id) && present(parent_id)).then_some((trace_id, parent_id))
}

fn method_label(method: &Method) -> &'static str {
    match *method {
        Method::GET => "GET",
        Method::HEAD => "HEAD",
        Method::POST => "POST",
        Method::PUT => "PUT",
        Method::DELETE => "DELETE",
        Method::OPTIONS => "OPTIONS",
        Method::PATCH => "PATCH",
        _ => "other",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn traceparent_is_taken_when_well_formed() {
        let good = "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01";
        assert_eq!(parse_traceparent(good), Some(("4bf92f3577b34da6a3ce929d0e0e4736", "00f067aa0ba902b7")));
        for bad in [
            "",
            "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7",
            "00-4BF92F3577B34DA6A3CE929D0E0E4736-00f067aa0ba902b7-01",
            "00-00000000000000000000000000000000-00f067aa0ba902b7-01",
            "ff-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01",
            "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01-more",
        ] {
            assert_eq!(parse_traceparent(bad), None, "{bad}");
        }
    }

    #[test]
    fn a_request_id_is_kept_when_plain() {
        let with = |id: &str| HeaderMap::from_iter([(REQUEST_ID, HeaderValue::from_str(id).unwrap())]);
        assert_eq!(request_id(&with("batch-7.a")), "batch-7.a");
        assert_ne!(request_id(&with("a b")), "a b");
        assert_ne!(request_id(&with(&"x".repeat(200))), "x".repeat(200));
        assert_eq!(request_id(&HeaderMap::new()).len(), 36);
    }
}

//! The outermost layer: request id, span, metrics, and problem documents for whatever went wrong inside.

mod tally;
mod trace;

use std::borrow::Cow;
use std::time::{Instant, SystemTime, UNIX_EPOCH};

use axum::extract::{MatchedPath, Request};
use axum::http::{HeaderMap, HeaderName, HeaderValue, Method, StatusCode, header};
use axum::middleware::Next;
use axum::response::Response;
use tracing::{Instrument, Span, field, info_span};
use uuid::Builder;
use uuid::fmt::Hyphenated;

use super::problem::{Pending, Problem};
use crate::credential::{masked, masked_path};
use trace::Trace;

pub use trace::TRACES;

const REQUEST_ID: HeaderName = HeaderName::from_static("x-request-id");
/// Longest incoming request id that is kept.
const MAX_REQUEST_ID_CHARS: usize = 128;

/// The request's id, for what is stored with it.
#[derive(Debug, Clone)]
pub struct RequestId(pub String);

/// Media type of problem documents.
pub const PROBLEM_JSON: HeaderValue = HeaderValue::from_static("application/problem+json");

/// Wraps every request.
pub async fn observe(mut request: Request, next: Next) -> Response {
    let started = Instant::now();
    // The matched path, never the raw one: a label must not take whatever a client types.
    let route = request.extensions().get::<MatchedPath>().cloned();
    let route = route.as_ref().map_or("unmatched", MatchedPath::as_str);
    let uri = request.uri().clone();
    let observation = Observation::begin(started, request.method(), route, uri.path(), request.headers());
    request.extensions_mut().insert(RequestId(id_text(&observation.id).to_owned()));
    let trace = Trace::begin(&observation, request.headers());
    let mut response = next.run(request).instrument(trace.span()).instrument(observation.span.clone()).await;
    observation.finish(&mut response);
    trace.finish(&response);
    response
}

/// A request that is being answered.
pub struct Observation<'a> {
    started: Instant,
    id: HeaderValue,
    method: &'static str,
    route: &'a str,
    path: Cow<'a, str>,
    span: Span,
}

impl<'a> Observation<'a> {
    /// A request that came at `started`.
    pub fn begin(started: Instant, method: &Method, route: &'a str, path: &'a str, headers: &HeaderMap) -> Self {
        let (id, method) = (request_id(headers), method_label(method));
        let path = masked_path(path);
        let span = request_span(id_text(&id), method, &path, headers);
        Self { started, id, method, route, path, span }
    }

    /// Completes the answer, counts it and writes it to the log.
    pub fn finish(self, response: &mut Response) {
        let _entered = self.span.enter();
        let status = response.status().as_u16();
        self.span.record("status", status);
        complete_problem(response, id_text(&self.id), &self.path);
        let elapsed = self.started.elapsed();
        let headers = response.headers_mut();
        headers.insert(REQUEST_ID, self.id);
        headers.insert(header::X_CONTENT_TYPE_OPTIONS, HeaderValue::from_static("nosniff"));
        tally::count((self.method, status), self.route, elapsed);
        tracing::info!(elapsed_us = elapsed.as_micros(), "served");
    }
}

/// Makes room in headers that are kept for what every answer gets: a map that grows anew each time costs more than setting it.
pub fn leave_room(headers: &mut HeaderMap) {
    headers.insert(REQUEST_ID, HeaderValue::from_static(""));
    headers.insert(header::X_CONTENT_TYPE_OPTIONS, HeaderValue::from_static("nosniff"));
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
fn request_id(headers: &HeaderMap) -> HeaderValue {
    let plain = |byte: u8| byte.is_ascii_alphanumeric() || b"-_.:".contains(&byte);
    match headers.get(REQUEST_ID) {
        Some(id)
            if (1..=MAX_REQUEST_ID_CHARS).contains(&id.len())
                && id.as_bytes().iter().all(|&byte| plain(byte))
                // An access key is no id.
                && matches!(masked(id_text(id)), Cow::Borrowed(_)) =>
        {
            id.clone()
        }
        _ => new_id(),
    }
}

/// A version 7 UUID, its random part from the thread's generator: asking the system each time costs more than the rest of it.
fn new_id() -> HeaderValue {
    let millis = SystemTime::now().duration_since(UNIX_EPOCH).unwrap_or_default().as_millis();
    // A time in milliseconds takes 48 bits of an id.
    let id = Builder::from_unix_timestamp_millis(millis as u64, &rand::random()).into_uuid();
    let mut text = [0; Hyphenated::LENGTH];
    HeaderValue::from_str(id.hyphenated().encode_lower(&mut text)).unwrap_or(HeaderValue::from_static("none"))
}

/// An id as text: it is plain.
fn id_text(id: &HeaderValue) -> &str {
    id.to_str().unwrap_or_default()
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
    if let Some((trace_id, parent_id, _)) = header_text(headers, "traceparent").and_then(parse_traceparent) {
        span.record("trace_id", trace_id);
        span.record("parent_id", parent_id);
    }
    span
}

fn header_text<'a>(headers: &'a HeaderMap, name: &str) -> Option<&'a str> {
    headers.get(name).and_then(|value| value.to_str().ok())
}

/// Trace id, parent id and flags of a W3C traceparent header of version 00 (or of a later one that begins like it).
fn parse_traceparent(text: &str) -> Option<(&str, &str, &str)> {
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
    (well_formed && present(trace_id) && present(parent_id)).then_some((trace_id, parent_id, flags))
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
        assert_eq!(parse_traceparent(good), Some(("4bf92f3577b34da6a3ce929d0e0e4736", "00f067aa0ba902b7", "01")));
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
        let request_id = |headers: &HeaderMap| id_text(&request_id(headers)).to_owned();
        let with = |id: &str| HeaderMap::from_iter([(REQUEST_ID, HeaderValue::from_str(id).unwrap())]);
        assert_eq!(request_id(&with("batch-7.a")), "batch-7.a");
        assert_ne!(request_id(&with("a b")), "a b");
        assert_ne!(request_id(&with(&"x".repeat(200))), "x".repeat(200));
        let made = request_id(&HeaderMap::new());
        assert_eq!(uuid::Uuid::parse_str(&made).unwrap().get_version_num(), 7);
        assert_ne!(request_id(&HeaderMap::new()), made);
    }
}

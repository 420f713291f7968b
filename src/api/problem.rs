//! Problem documents (RFC 9457).

use std::sync::Arc;
use std::time::Duration;

use axum::body::Body;
use axum::http::{HeaderName, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use utoipa::ToSchema;

use super::decode::{Faults, Place};
use crate::credential::masked;

/// A problem document: what was wrong, where, and what to do.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[schema(example = super::examples::problem)]
pub struct Problem {
    /// Always about:blank: code tells problems apart.
    #[serde(rename = "type")]
    #[schema(examples("about:blank"))]
    kind: &'static str,
    /// The status in words.
    #[schema(examples("Bad Request"))]
    title: &'static str,
    /// The HTTP status.
    #[schema(examples(400))]
    status: u16,
    /// Stable name of the problem.
    #[schema(examples("invalid_request"))]
    code: &'static str,
    /// What was wrong and what to do about it.
    detail: String,
    /// Path of the request.
    #[serde(skip_serializing_if = "Option::is_none")]
    instance: Option<String>,
    /// Id of the request, as in X-Request-Id and in the log.
    request_id: String,
    /// Everything wrong with the request, each with its place; up to a hundred.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    errors: Vec<FaultNote>,
    #[serde(skip)]
    #[schema(ignore)]
    retry_after: Option<Duration>,
    #[serde(skip)]
    #[schema(ignore)]
    extra_header: Option<(HeaderName, HeaderValue)>,
    #[serde(skip)]
    #[schema(ignore)]
    cause: Option<String>,
}

/// One thing wrong with a request.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct FaultNote {
    /// RFC 6901 pointer into the body.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(examples("/snapshots/0/degree_counts/3"))]
    pointer: Option<String>,
    /// Line of the body, when that is CSV.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    line: Option<u64>,
    /// Parameter of the query or the path at fault, when the fault is not in the body.
    #[serde(skip_serializing_if = "Option::is_none")]
    parameter: Option<String>,
    /// Header at fault, when the fault is not in the body.
    #[serde(skip_serializing_if = "Option::is_none")]
    header: Option<&'static str>,
    /// What is wrong and what to do about it.
    detail: String,
}

/// A problem on its way out; the outermost layer completes it with the request's id and path.
#[derive(Clone)]
pub struct Pending(pub Arc<Problem>);

impl Problem {
    /// A problem with a stable code.
    pub fn new(status: StatusCode, code: &'static str, detail: impl Into<String>) -> Self {
        Self {
            kind: "about:blank",
            title: status.canonical_reason().unwrap_or("Error"),
            status: status.as_u16(),
            code,
            detail: detail.into(),
            instance: None,
            request_id: String::new(),
            errors: Vec::new(),
            retry_after: None,
            extra_header: None,
            cause: None,
        }
    }

    /// The problem that stands for a bare status, answered by a layer that knows no problem documents.
    pub fn of_status(status: StatusCode) -> Self {
        let (code, detail) = match status {
            StatusCode::NOT_FOUND => {
                ("no_such_route", "Nothing is served under this path; /openapi.json lists what is.")
            }
            StatusCode::METHOD_NOT_ALLOWED => {
                ("method_not_allowed", "This path does not take this method; Allow lists those it takes.")
            }
            StatusCode::PAYLOAD_TOO_LARGE => ("body_too_large", "The body is too large."),
            status if status.is_server_error() => {
                ("internal", "Something broke on our side; the log has the cause under this request id.")
            }
            _ => ("bad_request", "The request cannot be served as it stands."),
        };
        Self::new(status, code, detail)
    }

    /// Adds faults.
    pub fn with_faults(mut self, faults: Faults) -> Self {
        let (list, unlisted) = faults.into_parts();
        if unlisted > 0 {
            self.detail = format!("{} {unlisted} more are not listed.", self.detail);
        }
        self.errors = list.into_iter().map(|fault| FaultNote::new(fault.place, fault.detail)).collect();
        self
    }

    /// Adds when to try again.
    pub fn retry_after(mut self, wait: Duration) -> Self {
        self.retry_after = Some(wait);
        self
    }

    /// Adds a header that belongs to the status.
    pub fn with_header(mut self, header: (HeaderName, HeaderValue)) -> Self {
        self.extra_header = Some(header);
        self
    }

    /// Adds what the log alone is told.
    pub fn because(mut self, cause: String) -> Self {
        self.cause = Some(cause);
        self
    }

    /// Adds the request's id and path.
    pub fn completed(&self, request_id: &str, path: &str) -> Self {
        // What a client sends may hold a key, and is told back here and there.
        let safe = |text: &str| masked(text).into_owned();
        let mut problem = Self { request_id: safe(request_id), instance: Some(safe(path)), ..self.clone() };
        problem.detail = safe(&problem.detail);
        for note in &mut problem.errors {
            note.detail = safe(&note.detail);
            note.pointer = note.pointer.as_deref().map(safe);
            note.parameter = note.parameter.as_deref().map(safe);
        }
        problem
    }

    /// The stable name.
    pub fn code(&self) -> &'static str {
        self.code
    }

    /// What the log alone is told.
    pub fn cause(&self) -> Option<&str> {
        self.cause.as_deref()
    }

    /// What was wrong and what to do about it.
    pub fn detail(&self) -> &str {
        &self.detail
    }

    /// The faults, each as place and detail.
    pub fn faults(&self) -> impl Iterator<Item = (&str, &str)> {
        self.errors.iter().map(|note| {
            let place = note.pointer.as_deref().or(note.parameter.as_deref()).or(note.header).unwrap_or_default();
            (place, note.detail.as_str())
        })
    }

    /// The document's bytes.
    pub fn to_body(&self) -> Body {
        serde_json::to_vec(self).map_or_else(|_| Body::empty(), Body::from)
    }
}

impl FaultNote {
    fn new(place: Place, detail: String) -> Self {
        let (mut pointer, mut line, mut parameter, mut header) = (None, None, None, None);
        match place {
            Place::Body(at) => pointer = Some(at),
            Place::Line(number) => line = Some(number),
            Place::Query(name) => parameter = Some(name),
            Place::Header(name) => header = Some(name),
        }
        Self { pointer, line, parameter, header, detail }
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let mut response = Response::new(Body::empty());
        *response.status_mut() = StatusCode::from_u16(self.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR);
        if let Some(wait) = self.retry_after {
            response.headers_mut().insert(header::RETRY_AFTER, HeaderValue::from(wait.as_secs().max(1)));
        }
        response.headers_mut().extend(self.extra_header.clone());
        response.extensions_mut().insert(Pending(Arc::new(self)));
        response
    }
}

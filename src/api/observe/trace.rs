//! The span of a request among others' traces: the caller's own where it names one, a new one otherwise.

use std::str::FromStr;

use axum::http::HeaderMap;
use axum::response::Response;
use opentelemetry::Context;
use opentelemetry::trace::{SpanContext, SpanId, TraceContextExt, TraceFlags, TraceId, TraceState};
use tracing::{Span, field, info_span};
use tracing_opentelemetry::OpenTelemetrySpanExt;

use super::{Observation, header_text, parse_traceparent};

/// Target of the spans that traces are made of; log lines do not show them.
pub const TRACES: &str = "tailcast::traces";

/// The span of a request; nothing where no traces are made.
pub struct Trace(Span);

impl Trace {
    /// Begins below the caller's span. Names and attributes are those of the OpenTelemetry conventions for HTTP servers; what a
    /// caller named (path, network, label) is not among them.
    pub fn begin(observed: &Observation<'_>, headers: &HeaderMap) -> Self {
        let (method, route) = (observed.method, observed.route);
        let span = info_span!(
            target: TRACES,
            parent: &observed.span,
            "request",
            otel.name = field::Empty,
            otel.kind = "server",
            otel.status_code = field::Empty,
            http.request.method = method,
            http.route = route,
            http.response.status_code = field::Empty,
            error.type = field::Empty,
        );
        if span.is_disabled() {
            return Self(span);
        }
        span.record("otel.name", format!("{method} {route}"));
        if let Some(parent) = remote_parent(headers) {
            // Nothing has looked at the span yet, and the layer is there: it made the span.
            let _ = span.set_parent(Context::new().with_remote_span_context(parent));
        } else {
            // So that a line of the log leads to the trace that begins here.
            let id = span.context().span().span_context().trace_id();
            observed.span.record("trace_id", field::display(id));
        }
        Self(span)
    }

    /// For what happens on the way to the answer.
    pub fn span(&self) -> Span {
        self.0.clone()
    }

    /// Ends with the answer. A status of 500 or more is an error of the server, any other is none.
    pub fn finish(self, response: &Response) {
        let status = response.status();
        self.0.record("http.response.status_code", status.as_u16());
        if status.is_server_error() {
            self.0.record("otel.status_code", "ERROR");
            self.0.record("error.type", status.as_str());
        }
    }
}

/// The caller's span, by the headers of W3C Trace Context.
fn remote_parent(headers: &HeaderMap) -> Option<SpanContext> {
    let (trace_id, parent_id, flags) = parse_traceparent(header_text(headers, "traceparent")?)?;
    let (trace_id, parent_id) = (TraceId::from_hex(trace_id).ok()?, SpanId::from_hex(parent_id).ok()?);
    let sampled = u8::from_str_radix(flags, 16).ok()? & 1 == 1;
    let flags = if sampled { TraceFlags::SAMPLED } else { TraceFlags::default() };
    // What cannot be read of it is dropped, and the parent kept (W3C Trace Context, section 4.3).
    let state = header_text(headers, "tracestate").and_then(|text| TraceState::from_str(text).ok()).unwrap_or_default();
    Some(SpanContext::new(trace_id, parent_id, flags, true, state))
}

//! A JSON body.

use axum::body::Bytes;
use axum::extract::{FromRequest, Request};
use axum::http::{HeaderMap, header};
use futures_util::StreamExt;
use serde_json::value::RawValue;
use tokio::time::timeout;
use tracing::{Instrument, Span, info_span};

use crate::api::admission::Held;
use crate::api::decode::Faults;
use crate::api::observe::TRACES;
use crate::api::{ApiError, AppState};
use crate::service::{Unfinished, converted};

/// Bodies above this many bytes are read off the async runtime: below, handing over costs more than reading.
const OFFLOAD_BYTES: usize = 64 * 1024;

/// A body announced as JSON, complete and within the size limit, not yet read.
#[derive(Debug, Clone)]
pub struct JsonBody(Bytes);

impl JsonBody {
    /// The bytes as they came.
    pub fn bytes(&self) -> &[u8] {
        &self.0
    }

    /// Reads the body with `read`, which notes every fault.
    pub async fn read<T: Send + 'static>(
        self,
        read: impl FnOnce(&RawValue, &mut Faults) -> Option<T> + Send + 'static,
    ) -> Result<T, ApiError> {
        let span = parsing("json", &self.0);
        if self.0.len() <= OFFLOAD_BYTES {
            return span.in_scope(|| read_json(&self.0, read));
        }
        converted(move || span.in_scope(|| read_json(&self.0, read))).await.unwrap_or_else(unread)
    }
}

impl FromRequest<AppState> for JsonBody {
    type Rejection = ApiError;

    async fn from_request(request: Request, state: &AppState) -> Result<Self, ApiError> {
        if !is_json(request.headers()) {
            return Err(ApiError::UnsupportedMediaType { taken: "JSON (application/json)" });
        }
        complete(request, state).await.map(Self)
    }
}

/// A JSON body that may be left out, which is an object without fields.
#[derive(Debug, Clone)]
pub struct OptionalJsonBody(pub JsonBody);

impl FromRequest<AppState> for OptionalJsonBody {
    type Rejection = ApiError;

    async fn from_request(request: Request, state: &AppState) -> Result<Self, ApiError> {
        let json = is_json(request.headers());
        let bytes = complete(request, state).await?;
        match bytes.is_empty() {
            true => Ok(Self(JsonBody(Bytes::from_static(b"{}")))),
            false if json => Ok(Self(JsonBody(bytes))),
            false => Err(ApiError::UnsupportedMediaType { taken: "JSON (application/json)" }),
        }
    }
}

/// A body of rows, announced as JSON or as CSV.
#[derive(Debug, Clone)]
pub enum RowsBody {
    /// JSON.
    Json(JsonBody),
    /// CSV (RFC 4180) with a header.
    Csv(Bytes),
}

impl RowsBody {
    /// Reads the body in the form it has; both ways note every fault.
    pub async fn read<T: Send + 'static>(
        self,
        json: impl FnOnce(&RawValue, &mut Faults) -> Option<T> + Send + 'static,
        csv: impl FnOnce(&[u8], &mut Faults) -> Option<T> + Send + 'static,
    ) -> Result<T, ApiError> {
        match self {
            Self::Json(body) => body.read(json).await,
            Self::Csv(bytes) if bytes.len() <= OFFLOAD_BYTES => {
                parsing("csv", &bytes).in_scope(|| faultless(|faults| csv(&bytes, faults)))
            }
            Self::Csv(bytes) => {
                let span = parsing("csv", &bytes);
                converted(move || span.in_scope(|| faultless(|faults| csv(&bytes, faults))))
                    .await
                    .unwrap_or_else(unread)
            }
        }
    }
}

impl FromRequest<AppState> for RowsBody {
    type Rejection = ApiError;

    async fn from_request(request: Request, state: &AppState) -> Result<Self, ApiError> {
        if is_json(request.headers()) {
            complete(request, state).await.map(|bytes| Self::Json(JsonBody(bytes)))
        } else if media_type(request.headers()).is_some_and(|essence| essence == "text/csv") {
            complete(request, state).await.map(Self::Csv)
        } else {
            Err(ApiError::UnsupportedMediaType { taken: "JSON (application/json) or CSV (text/csv)" })
        }
    }
}

/// The span of reading a body.
fn parsing(form: &'static str, bytes: &Bytes) -> Span {
    info_span!(target: TRACES, "parse", form, bytes = bytes.len() as u64)
}

/// The whole body, when it comes as it is, in time and within the size limit.
async fn complete(request: Request, state: &AppState) -> Result<Bytes, ApiError> {
    let (limit, time) = (state.http.body_limit_bytes, state.http.body_timeout());
    if !is_plain(request.headers()) {
        return Err(ApiError::EncodedBody { gzip: false });
    }
    if announced_length(request.headers()).is_some_and(|length| length > limit as u64) {
        return Err(ApiError::TooLarge { limit });
    }
    timeout(time, received(request, limit).instrument(info_span!(target: TRACES, "receive")))
        .await
        .unwrap_or(Err(ApiError::BodyTooSlow { limit: time }))
}

/// The bytes as they come. They count against `http.bodies_bytes` as far as they have come, whatever length was announced, and until
/// the request is answered: what is read from them is as large.
async fn received(request: Request, limit: usize) -> Result<Bytes, ApiError> {
    let held = request.extensions().get::<Held>().cloned();
    let mut pieces = request.into_body().into_data_stream();
    let mut bytes = Vec::new();
    while let Some(piece) = pieces.next().await {
        let piece = piece.map_err(|_| ApiError::BodyBroken)?;
        if bytes.len() + piece.len() > limit {
            return Err(ApiError::TooLarge { limit });
        }
        bytes.extend_from_slice(&piece);
        if let Some(held) = &held {
            held.grow_to(bytes.capacity())?;
        }
    }
    Ok(bytes.into())
}

fn unread<T>(why: Unfinished) -> Result<T, ApiError> {
    Err(ApiError::Broken(format!("reading a body stopped short: {why}")))
}

/// Reads JSON text with `read`; the outcome is what it gives, unless it noted a fault.
pub fn read_json<T>(bytes: &[u8], read: impl FnOnce(&RawValue, &mut Faults) -> Option<T>) -> Result<T, ApiError> {
    let malformed = |why: String| Err(ApiError::MalformedJson(why));
    // JSON text from some editors starts with a byte order mark; RFC 8259 lets a reader pass over it.
    let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    let Ok(text) = std::str::from_utf8(bytes) else {
        return malformed("The body is not UTF-8; JSON is.".into());
    };
    if text.trim().is_empty() {
        return malformed("The body is empty; a JSON object is wanted.".into());
    }
    let raw = match serde_json::from_str::<&RawValue>(text) {
        Ok(raw) => raw,
        Err(error) if error.is_eof() => return malformed(format!("The body breaks off before its end: {error}.")),
        Err(error) => return malformed(format!("The body is not JSON: {error}.")),
    };
    faultless(|faults| read(raw, faults))
}

/// What `read` gives, unless it noted a fault.
pub fn faultless<T>(read: impl FnOnce(&mut Faults) -> Option<T>) -> Result<T, ApiError> {
    let mut faults = Faults::default();
    match read(&mut faults) {
        Some(value) if faults.is_empty() => Ok(value),
        None if faults.is_empty() => Err(ApiError::Broken("a body was refused without a fault".into())),
        _ => Err(ApiError::Invalid(faults)),
    }
}

/// `application/json` or another JSON format's media type, in UTF-8.
fn is_json(headers: &HeaderMap) -> bool {
    let json = |essence: &str| {
        essence == "application/json" || (essence.starts_with("application/") && essence.ends_with("+json"))
    };
    media_type(headers).is_some_and(|essence| json(&essence))
}

/// The body's media type in lower case; none when it is not announced, or as text in another encoding than UTF-8.
pub(super) fn media_type(headers: &HeaderMap) -> Option<String> {
    let mut parts = headers.get(header::CONTENT_TYPE)?.to_str().ok()?.split(';').map(str::trim);
    let essence = parts.next().unwrap_or_default().to_ascii_lowercase();
    let utf8 = parts.all(|parameter| match parameter.split_once('=') {
        Some((name, value)) if name.eq_ignore_ascii_case("charset") => {
            let value = value.trim_matches('"');
            value.eq_ignore_ascii_case("utf-8") || value.eq_ignore_ascii_case("us-ascii")
        }
        _ => true,
    });
    utf8.then_some(essence)
}

/// Whether the body is sent as it is: neither compressed nor otherwise encoded.
fn is_plain(headers: &HeaderMap) -> bool {
    encodings(headers).next().is_none()
}

/// How the body is encoded, in the order in which that was done.
pub(super) fn encodings(headers: &HeaderMap) -> impl Iterator<Item = &[u8]> {
    let values = headers.get_all(header::CONTENT_ENCODING).iter();
    let named = values.flat_map(|value| value.as_bytes().split(|&byte| byte == b',')).map(<[u8]>::trim_ascii);
    named.filter(|encoding| !encoding.is_empty() && !encoding.eq_ignore_ascii_case(b"identity"))
}

/// The length that the body is announced with.
pub(super) fn announced_length(headers: &HeaderMap) -> Option<u64> {
    headers.get(header::CONTENT_LENGTH)?.to_str().ok()?.parse().ok()
}

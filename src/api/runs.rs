//! Answers about kept runs: their two forms, validators, lists.

use axum::Json;
use axum::body::Body;
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use jiff::Timestamp;
use serde::Serialize;
use utoipa::ToSchema;
use uuid::Uuid;

use super::ApiError;
use super::extract::{Listing, ResultFormat};
use crate::service::{RunSummary, StoredRun};

/// A run's line in a list.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct RunLine {
    /// Id of the run.
    id: Uuid,
    /// When it was answered, RFC 3339.
    #[schema(format = DateTime)]
    created_at: String,
    /// The caller's name for it.
    label: Option<String>,
    /// Tracked network it belongs to; null for a run from inline counts.
    network: Option<String>,
    /// Engine and version that computed it.
    engine: String,
    /// Seed of everything random in it, so far the samples behind the goodness of fit.
    seed: u64,
    /// Digest of the validated inputs.
    inputs_digest: String,
}

/// Runs, newest first; the Link header leads to the next page.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct RunPage {
    /// The runs.
    items: Vec<RunLine>,
}

impl From<RunSummary> for RunLine {
    fn from(run: RunSummary) -> Self {
        Self {
            id: run.id,
            created_at: run.created_at.to_string(),
            label: run.label,
            network: run.network,
            engine: run.engine,
            seed: run.seed,
            inputs_digest: run.inputs_digest,
        }
    }
}

/// Turns a kept document into CSV.
pub type ToCsv = fn(&str) -> Result<String, ApiError>;

/// 201 with the run and where it is kept.
pub fn created(path: &str, run: StoredRun, format: ResultFormat, to_csv: ToCsv) -> Result<Response, ApiError> {
    let location = header_value(&format!("{path}/{}", run.id))?;
    let mut response = (StatusCode::CREATED, represented(run, format, to_csv)?).into_response();
    response.headers_mut().insert(header::LOCATION, location);
    Ok(response)
}

/// 200 with the run, or 304 when the client has it already.
pub fn found(run: StoredRun, format: ResultFormat, asked: &HeaderMap, to_csv: ToCsv) -> Result<Response, ApiError> {
    if is_unmodified(asked, &entity_tag(&run.tag, format), run.created_at) {
        let mut response = StatusCode::NOT_MODIFIED.into_response();
        *response.headers_mut() = validators(&run, format)?;
        return Ok(response);
    }
    represented(run, format, to_csv)
}

/// A page of runs with a Link to the next one.
pub fn page(path: &str, listing: &Listing, runs: Vec<RunSummary>, more: bool) -> Result<Response, ApiError> {
    let next = runs.last().filter(|_| more).map(|last| next_page(path, listing, last.id));
    let mut response = Json(RunPage { items: runs.into_iter().map(RunLine::from).collect() }).into_response();
    response.headers_mut().insert(header::CACHE_CONTROL, HeaderValue::from_static("no-store"));
    if let Some(next) = next {
        response.headers_mut().insert(header::LINK, header_value(&format!("<{next}>; rel=\"next\""))?);
    }
    Ok(response)
}

/// Whether If-Match, when there is one, names the run with this validator in either of its forms.
pub fn if_match_holds(asked: &HeaderMap, tag: &str) -> bool {
    let forms = [entity_tag(tag, ResultFormat::Json), entity_tag(tag, ResultFormat::Csv)];
    let mut values = asked.get_all(header::IF_MATCH).iter().peekable();
    values.peek().is_none() || values.any(|value| names_any(value, &forms, false))
}

fn represented(run: StoredRun, format: ResultFormat, to_csv: ToCsv) -> Result<Response, ApiError> {
    let mut headers = validators(&run, format)?;
    headers.insert(header::CONTENT_TYPE, HeaderValue::from_static(format.content_type()));
    let body = match format {
        ResultFormat::Json => Body::from(run.document),
        ResultFormat::Csv => Body::from(to_csv(&run.document)?),
    };
    let mut response = Response::new(body);
    *response.headers_mut() = headers;
    Ok(response)
}

/// A run never changes but can be deleted: caches may keep it, and must ask before each use.
fn validators(run: &StoredRun, format: ResultFormat) -> Result<HeaderMap, ApiError> {
    let mut headers = HeaderMap::new();
    headers.insert(header::ETAG, header_value(&entity_tag(&run.tag, format))?);
    headers.insert(header::LAST_MODIFIED, header_value(&httpdate::fmt_http_date(run.created_at.into()))?);
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("private, no-cache"));
    headers.insert(header::VARY, HeaderValue::from_static("accept"));
    Ok(headers)
}

/// Strong validator of one form of a run. The CSV is made from the document anew by each version, so the version is
/// part of its validator.
fn entity_tag(tag: &str, format: ResultFormat) -> String {
    match format {
        ResultFormat::Json => format!("\"{tag}\""),
        ResultFormat::Csv => format!("\"{tag}-csv-{}\"", env!("CARGO_PKG_VERSION")),
    }
}

/// If-None-Match decides; If-Modified-Since only where the former is absent (RFC 9110, section 13.2.2).
fn is_unmodified(asked: &HeaderMap, entity_tag: &str, modified: Timestamp) -> bool {
    let mut tags = asked.get_all(header::IF_NONE_MATCH).iter().peekable();
    if tags.peek().is_some() {
        return tags.any(|value| names_any(value, &[entity_tag.to_owned()], true));
    }
    let since = asked.get(header::IF_MODIFIED_SINCE).and_then(|value| value.to_str().ok());
    let since =
        since.and_then(|text| httpdate::parse_http_date(text).ok()).and_then(|time| Timestamp::try_from(time).ok());
    since.is_some_and(|since| modified.as_second() <= since.as_second())
}

/// Whether a list of entity tags holds one of `forms`, or is `*`. Weak tags match only where `weak` says so.
fn names_any(value: &HeaderValue, forms: &[String], weak: bool) -> bool {
    let Ok(text) = value.to_str() else { return false };
    text.trim() == "*"
        || text.split(',').map(str::trim).any(|tag| {
            let opaque = if weak { tag.strip_prefix("W/").unwrap_or(tag) } else { tag };
            forms.iter().any(|form| form == opaque)
        })
}

fn next_page(path: &str, listing: &Listing, last: Uuid) -> String {
    let mut address = format!("{path}?cursor={last}");
    for (name, value) in &listing.repeated {
        address.push('&');
        address.push_str(name);
        address.push('=');
        address.extend(value.bytes().map(|byte| match byte {
            b'A'..=b'Z' | b'a'..=b'z' | b'0'..=b'9' | b'-' | b'.' | b'_' | b'~' => char::from(byte).to_string(),
            _ => format!("%{byte:02X}"),
        }));
    }
    address
}

fn header_value(text: &str) -> Result<HeaderValue, ApiError> {
    HeaderValue::from_str(text).map_err(|error| ApiError::Broken(format!("{text:?} is no header value: {error}")))
}

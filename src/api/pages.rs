//! Pages of lists: `limit` and `cursor`, and the Link (RFC 8288) that leads to the next.

use axum::Json;
use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use axum::http::{HeaderValue, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;

use super::decode::{Fault, Faults, Place};
use super::extract::parameters;
use super::representation::header_value;
use super::{ApiError, AppState};

const DEFAULT_LIMIT: u32 = 50;
const MAX_LIMIT: u32 = 200;

/// A page's length from the text of `limit`.
pub fn limit(text: Option<&str>) -> Result<u32, String> {
    match text.map_or(Ok(DEFAULT_LIMIT), str::parse) {
        Ok(limit) if (1..=MAX_LIMIT).contains(&limit) => Ok(limit),
        _ => Err(format!("a limit is a whole number from 1 to {MAX_LIMIT}")),
    }
}

/// What to say of a cursor that is none.
pub const NO_CURSOR: &str = "this is no cursor; take it from the Link header of the page before";

/// What a list without filters is asked for.
#[derive(Debug, Clone)]
pub struct Paging {
    /// At most so many items.
    pub limit: u32,
    cursor: Option<String>,
}

impl Paging {
    /// Where the page before ended, as `read` understands it.
    pub fn after<T>(&self, read: impl FnOnce(&str) -> Option<T>) -> Result<Option<T>, ApiError> {
        let Some(cursor) = &self.cursor else { return Ok(None) };
        read(cursor).map(Some).ok_or_else(|| ApiError::fault(Place::Query("cursor".into()), NO_CURSOR))
    }

    /// Address of the page that starts after `last`.
    pub fn next(&self, path: &str, last: &str) -> String {
        let limit = if self.limit == DEFAULT_LIMIT { String::new() } else { format!("&limit={}", self.limit) };
        format!("{path}?cursor={}{limit}", escaped(last))
    }
}

impl FromRequestParts<AppState> for Paging {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["limit", "cursor"], &mut faults);
        let value = |name: &str| given.iter().find(|(found, _)| found == name).map(|(_, value)| value.as_str());
        let limit = limit(value("limit")).map_err(|detail| {
            faults.push(Fault { place: Place::Query("limit".into()), detail });
        });
        match limit {
            Ok(limit) if faults.is_empty() => Ok(Self { limit, cursor: value("cursor").map(str::to_owned) }),
            _ => Err(ApiError::Invalid(faults)),
        }
    }
}

/// A page, with a Link to the next one where there is one.
pub fn page(page: impl Serialize, next: Option<String>) -> Result<Response, ApiError> {
    let mut response = Json(page).into_response();
    response.headers_mut().insert(header::CACHE_CONTROL, HeaderValue::from_static("no-store"));
    if let Some(next) = next {
        response.headers_mut().insert(header::LINK, header_value(&format!("<{next}>; rel=\"next\""))?);
    }
    Ok(response)
}

/// A text as it stands in a query (RFC 3986).
pub fn escaped(text: &str) -> String {
    text.bytes()
        .map(|byte| match byte {
            b'A'..=b'Z' | b'a'..=b'z' | b'0'..=b'9' | b'-' | b'.' | b'_' | b'~' => char::from(byte).to_string(),
            _ => format!("%{byte:02X}"),
        })
        .collect()
}

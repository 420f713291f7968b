//! Representations of what is kept, with their validators (RFC 9110, sections 8.8 and 13).

use std::fmt::Display;

use axum::body::Body;
use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use jiff::Timestamp;

use super::extract::ResultFormat;
use super::{ApiError, AppState};
use crate::report::content_policy;
use crate::service::converted;

/// Documents up to this size are read and written as fast as handed to another thread.
pub const LIGHT_BYTES: usize = 64 * 1024;

/// What tells one state of something kept from another.
#[derive(Debug, Clone, Copy)]
pub struct Validator<'a> {
    /// Digest of its content.
    pub tag: &'a str,
    /// When it was last changed; none for what changes from moment to moment.
    pub modified: Option<Timestamp>,
}

/// What a representation holds, and what a browser may load for it.
pub struct Content {
    body: Body,
    policy: Option<String>,
}

impl From<Body> for Content {
    fn from(body: Body) -> Self {
        Self { body, policy: None }
    }
}

impl Content {
    /// A document as it is kept.
    pub fn json(document: String) -> Self {
        Body::from(document).into()
    }

    /// A table.
    pub fn csv<E: Display>(table: Result<String, E>) -> Result<Self, ApiError> {
        table.map(|text| Body::from(text).into()).map_err(|error| ApiError::Broken(format!("writing CSV: {error}")))
    }

    /// SVG or HTML, which may load nothing and style itself by nothing but what it has within.
    pub fn markup(text: String) -> Self {
        Self { policy: Some(content_policy(&text)), body: Body::from(text) }
    }

    /// A response in a form, without validators.
    pub fn into_response(self, format: ResultFormat) -> Result<Response, ApiError> {
        let mut response = Response::new(self.body);
        let headers = response.headers_mut();
        headers.insert(header::CONTENT_TYPE, HeaderValue::from_static(format.content_type()));
        if let Some(policy) = &self.policy {
            headers.insert(header::CONTENT_SECURITY_POLICY, header_value(policy)?);
        }
        Ok(response)
    }
}

/// 200 with a representation, or 304 when the client has it already.
pub fn found<C: Into<Content>>(
    validator: Validator<'_>,
    format: ResultFormat,
    asked: &HeaderMap,
    content: impl FnOnce() -> Result<C, ApiError>,
) -> Result<Response, ApiError> {
    match unmodified(validator, format, asked)? {
        Some(response) => Ok(response),
        None => represented(validator, format, content()?),
    }
}

/// The same of content that takes time to make: it is made off the async runtime, unless it is `light`.
pub async fn found_drawn<C: Into<Content> + Send + 'static>(
    validator: Validator<'_>,
    format: ResultFormat,
    asked: &HeaderMap,
    light: bool,
    content: impl FnOnce() -> Result<C, ApiError> + Send + 'static,
) -> Result<Response, ApiError> {
    match unmodified(validator, format, asked)? {
        Some(response) => Ok(response),
        None => represented(validator, format, drawn(light, content).await?),
    }
}

/// What `make` makes, off the async runtime unless it is `light`.
pub async fn drawn<T: Send + 'static>(
    light: bool,
    make: impl FnOnce() -> Result<T, ApiError> + Send + 'static,
) -> Result<T, ApiError> {
    if light {
        return make();
    }
    converted(make)
        .await
        .unwrap_or_else(|error| Err(ApiError::Broken(format!("drawing an answer stopped short: {error}"))))
}

/// 304, when the client has the representation already.
fn unmodified(validator: Validator<'_>, format: ResultFormat, asked: &HeaderMap) -> Result<Option<Response>, ApiError> {
    if !is_unmodified(asked, &entity_tag(validator.tag, format), validator.modified) {
        return Ok(None);
    }
    let mut response = StatusCode::NOT_MODIFIED.into_response();
    *response.headers_mut() = validators(validator, format)?;
    Ok(Some(response))
}

/// A representation with its validators.
pub fn represented(
    validator: Validator<'_>,
    format: ResultFormat,
    content: impl Into<Content>,
) -> Result<Response, ApiError> {
    let mut response = content.into().into_response(format)?;
    response.headers_mut().extend(validators(validator, format)?);
    Ok(response)
}

/// Strong validator of one form of something kept. All forms but JSON are made anew by each version, so the version is part of
/// their validator.
pub fn entity_tag(tag: &str, format: ResultFormat) -> String {
    match format {
        ResultFormat::Json => format!("\"{tag}\""),
        made => format!("\"{tag}-{}-{}\"", made.name(), env!("CARGO_PKG_VERSION")),
    }
}

/// What is kept can change or be deleted: caches may keep it, and must ask before each use.
fn validators(validator: Validator<'_>, format: ResultFormat) -> Result<HeaderMap, ApiError> {
    let mut headers = HeaderMap::new();
    headers.insert(header::ETAG, header_value(&entity_tag(validator.tag, format))?);
    if let Some(modified) = validator.modified {
        // Not ahead of the clock (RFC 9110, section 8.8.2.1), which may have gone back.
        let modified = modified.min(Timestamp::now());
        headers.insert(header::LAST_MODIFIED, header_value(&httpdate::fmt_http_date(modified.into()))?);
    }
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("private, no-cache"));
    headers.insert(header::VARY, HeaderValue::from_static("accept"));
    Ok(headers)
}

/// If-None-Match decides; If-Modified-Since only where the former is absent (RFC 9110, section 13.2.2).
pub fn is_unmodified(asked: &HeaderMap, entity_tag: &str, modified: Option<Timestamp>) -> bool {
    let mut tags = asked.get_all(header::IF_NONE_MATCH).iter().peekable();
    if tags.peek().is_some() {
        return tags.any(|value| names(value, |opaque| opaque == entity_tag, true));
    }
    let since = asked.get(header::IF_MODIFIED_SINCE).and_then(|value| value.to_str().ok());
    let since =
        since.and_then(|text| httpdate::parse_http_date(text).ok()).and_then(|time| Timestamp::try_from(time).ok());
    since.zip(modified).is_some_and(|(since, modified)| modified.as_second() <= since.as_second())
}

/// The conditions that a change is asked for under: If-Match and If-None-Match.
#[derive(Debug, Clone)]
pub struct Conditions {
    match_any: Vec<HeaderValue>,
    match_none: Vec<HeaderValue>,
}

impl Conditions {
    /// Whether they hold where what stands there has this validator, in any of its forms, or where there is nothing.
    pub fn hold(&self, current: Option<&str>) -> bool {
        let named = |values: &[HeaderValue], weak| {
            current.is_some_and(|tag| values.iter().any(|value| names(value, |opaque| is_form_of(opaque, tag), weak)))
        };
        (self.match_any.is_empty() || named(&self.match_any, false)) && !named(&self.match_none, true)
    }
}

impl FromRequestParts<AppState> for Conditions {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let all = |name| parts.headers.get_all(name).iter().cloned().collect();
        Ok(Self { match_any: all(header::IF_MATCH), match_none: all(header::IF_NONE_MATCH) })
    }
}

/// Whether an entity tag is that of a form of what has the validator `tag`: it starts with it, and goes on with the form.
fn is_form_of(entity_tag: &str, tag: &str) -> bool {
    let after = entity_tag.strip_prefix('"').and_then(|text| text.strip_prefix(tag));
    after.is_some_and(|rest| rest.starts_with('-') && rest.ends_with('"') || rest == "\"")
}

/// Whether a list of entity tags holds one that `is_meant`, or is `*`. Weak tags match only where `weak` says so.
fn names(value: &HeaderValue, is_meant: impl Fn(&str) -> bool, weak: bool) -> bool {
    let Ok(text) = value.to_str() else { return false };
    text.trim() == "*"
        || text.split(',').map(str::trim).any(|tag| {
            let opaque = if weak { tag.strip_prefix("W/").unwrap_or(tag) } else { tag };
            is_meant(opaque)
        })
}

/// A text as a header's value.
pub fn header_value(text: &str) -> Result<HeaderValue, ApiError> {
    HeaderValue::from_str(text).map_err(|error| ApiError::Broken(format!("{text:?} is no header value: {error}")))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn conditions(match_any: &[&'static str], match_none: &[&'static str]) -> Conditions {
        let values = |texts: &[&'static str]| texts.iter().map(|&text| HeaderValue::from_static(text)).collect();
        Conditions { match_any: values(match_any), match_none: values(match_none) }
    }

    #[test]
    fn conditions_hold_as_rfc_9110_says() {
        // If-Match, If-None-Match, what stands there, whether they hold.
        for (match_any, match_none, current, holds) in [
            (vec![], vec![], None, true),
            (vec![], vec![], Some("a"), true),
            (vec!["*"], vec![], None, false),
            (vec!["*"], vec![], Some("a"), true),
            (vec!["\"b\", \"a\""], vec![], Some("a"), true),
            (vec!["\"b\""], vec![], Some("a"), false),
            (vec!["W/\"a\""], vec![], Some("a"), false),
            (vec!["\"b\"", "\"a\""], vec![], Some("a"), true),
            (vec!["a"], vec![], Some("a"), false),
            (vec![], vec!["*"], None, true),
            (vec![], vec!["*"], Some("a"), false),
            (vec![], vec!["W/\"a\""], Some("a"), false),
            (vec![], vec!["\"b\""], Some("a"), true),
        ] {
            let conditions = conditions(&match_any, &match_none);
            assert_eq!(conditions.hold(current), holds, "{conditions:?} {current:?}");
        }
        let csv: &'static str = Box::leak(entity_tag("a", ResultFormat::Csv).into_boxed_str());
        assert!(conditions(&[csv], &[]).hold(Some("a")), "either form names it");
        assert!(conditions(&["\"a-limits-csv-0.1.0\""], &[]).hold(Some("a")), "and so does a part");
        assert!(!conditions(&["\"ab\""], &[]).hold(Some("a")), "another validator does not");
    }
}

//! Content negotiation (RFC 9110) on results.

use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use axum::http::{HeaderMap, header};
use utoipa::ToSchema;

use super::parameters;
use crate::api::decode::{Fault, Faults, Place};
use crate::api::{ApiError, AppState};

/// The form a result is answered in.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ToSchema)]
#[schema(rename_all = "snake_case")]
pub enum ResultFormat {
    /// The run as it is kept.
    Json,
    /// A table, RFC 4180.
    Csv,
}

impl ResultFormat {
    /// Every form, the default first.
    const ALL: [Self; 2] = [Self::Json, Self::Csv];

    /// The media type in a Content-Type header.
    pub fn content_type(self) -> &'static str {
        match self {
            Self::Json => "application/json",
            Self::Csv => "text/csv; charset=utf-8; header=present",
        }
    }

    fn media_type(self) -> (&'static str, &'static str) {
        match self {
            Self::Json => ("application", "json"),
            Self::Csv => ("text", "csv"),
        }
    }
}

impl FromRequestParts<AppState> for ResultFormat {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let asked = parameters(&parts.uri, &["format"], &mut faults).into_iter().find(|(name, _)| name == "format");
        let format = match asked.as_ref().map(|(_, value)| value.as_str()) {
            None => None,
            Some("json") => Some(Self::Json),
            Some("csv") => Some(Self::Csv),
            Some(_) => {
                let detail = "the forms are json and csv".into();
                faults.push(Fault { place: Place::Query("format".into()), detail });
                None
            }
        };
        if !faults.is_empty() {
            return Err(ApiError::Invalid(faults));
        }
        format.or_else(|| accepted(&parts.headers)).ok_or(ApiError::NotAcceptable)
    }
}

/// The form the client likes best of those we have; none when it takes none of them.
fn accepted(headers: &HeaderMap) -> Option<ResultFormat> {
    let ranges: Vec<Range> = headers
        .get_all(header::ACCEPT)
        .iter()
        .filter_map(|value| value.to_str().ok())
        .flat_map(|value| value.split(','))
        .filter_map(Range::parse)
        .collect();
    if ranges.is_empty() {
        return Some(ResultFormat::Json);
    }
    let quality = |format: ResultFormat| {
        // The most specific range that covers the form decides.
        ranges
            .iter()
            .filter(|range| range.covers(format))
            .max_by_key(|range| range.specificity())
            .map_or(0.0, |r| r.quality)
    };
    let mut best: Option<(f32, ResultFormat)> = None;
    for format in ResultFormat::ALL {
        let q = quality(format);
        if q > best.map_or(0.0, |(q, _)| q) {
            best = Some((q, format));
        }
    }
    best.map(|(_, format)| format)
}

struct Range {
    kind: String,
    subtype: String,
    quality: f32,
}

impl Range {
    fn parse(text: &str) -> Option<Self> {
        let mut parts = text.split(';').map(str::trim);
        let (kind, subtype) = parts.next()?.split_once('/')?;
        let quality = parts
            .filter_map(|parameter| parameter.split_once('='))
            .find(|(name, _)| name.trim().eq_ignore_ascii_case("q"))
            .map_or(Some(1.0), |(_, value)| value.trim().parse().ok())?;
        let (kind, subtype) = (kind.to_ascii_lowercase(), subtype.to_ascii_lowercase());
        Some(Self { kind, subtype, quality })
    }

    fn covers(&self, format: ResultFormat) -> bool {
        let (kind, subtype) = format.media_type();
        match (self.kind.as_str(), self.subtype.as_str()) {
            ("*", "*") => true,
            (k, "*") => k == kind,
            (k, s) => k == kind && s == subtype,
        }
    }

    fn specificity(&self) -> u8 {
        u8::from(self.kind != "*") + u8::from(self.subtype != "*")
    }
}

#[cfg(test)]
mod tests {
    use axum::http::HeaderValue;

    use super::*;

    #[test]
    fn the_best_liked_form_wins() {
        use ResultFormat::{Csv, Json};
        for (accept, expected) in [
            ("*/*", Some(Json)),
            ("text/csv", Some(Csv)),
            ("application/json;q=0.5, text/csv", Some(Csv)),
            ("text/*, application/json;q=0.1", Some(Csv)),
            ("text/html, application/xhtml+xml, */*;q=0.8", Some(Json)),
            ("*/*, application/json;q=0", Some(Csv)),
            ("image/png", None),
            ("application/json;q=0", None),
            ("nonsense", Some(Json)),
        ] {
            let headers = HeaderMap::from_iter([(header::ACCEPT, HeaderValue::from_static(accept))]);
            assert_eq!(accepted(&headers), expected, "{accept}");
        }
        assert_eq!(accepted(&HeaderMap::new()), Some(Json));
    }
}

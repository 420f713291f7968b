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
    /// A chart.
    Svg,
    /// A report of one page.
    Html,
}

/// The form of what is rows and nothing else.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ToSchema)]
#[schema(rename_all = "snake_case")]
pub enum TableFormat {
    /// JSON.
    Json,
    /// A table, RFC 4180.
    Csv,
}

/// The forms that something comes in, the default first.
#[derive(Debug)]
pub struct Offer {
    formats: &'static [ResultFormat],
    /// Their names in a query, in words.
    names: &'static str,
    /// Their media types, in words.
    media_types: &'static str,
}

/// What a result comes in.
pub const FACES: Offer = Offer {
    formats: &[ResultFormat::Json, ResultFormat::Csv, ResultFormat::Svg, ResultFormat::Html],
    names: "json, csv, svg and html",
    media_types: "application/json, text/csv, image/svg+xml and text/html",
};

/// What rows come in.
pub const TABLES: Offer = Offer {
    formats: &[ResultFormat::Json, ResultFormat::Csv],
    names: "json and csv",
    media_types: "application/json and text/csv",
};

impl ResultFormat {
    /// Its name in a query.
    pub fn name(self) -> &'static str {
        match self {
            Self::Json => "json",
            Self::Csv => "csv",
            Self::Svg => "svg",
            Self::Html => "html",
        }
    }

    /// The media type in a Content-Type header.
    pub fn content_type(self) -> &'static str {
        match self {
            Self::Json => "application/json",
            Self::Csv => "text/csv; charset=utf-8; header=present",
            Self::Svg => "image/svg+xml",
            Self::Html => "text/html; charset=utf-8",
        }
    }

    fn media_type(self) -> (&'static str, &'static str) {
        match self {
            Self::Json => ("application", "json"),
            Self::Csv => ("text", "csv"),
            Self::Svg => ("image", "svg+xml"),
            Self::Html => ("text", "html"),
        }
    }

    /// The form that the query, or else the client's headers, ask for of those on offer; `faults` are those of the query so far.
    pub fn of(
        given: &[(String, String)],
        headers: &HeaderMap,
        offer: &Offer,
        mut faults: Faults,
    ) -> Result<Self, ApiError> {
        let asked = given.iter().find(|(name, _)| name == "format");
        let format = asked.map(|(_, value)| offer.formats.iter().copied().find(|format| format.name() == value));
        if format == Some(None) {
            let detail = format!("the forms are {}", offer.names);
            faults.push(Fault { place: Place::Query("format".into()), detail });
        }
        if !faults.is_empty() {
            return Err(ApiError::Invalid(faults));
        }
        let refused = ApiError::NotAcceptable { offered: offer.media_types };
        format.flatten().or_else(|| accepted(headers, offer)).ok_or(refused)
    }
}

impl From<TableFormat> for ResultFormat {
    fn from(format: TableFormat) -> Self {
        match format {
            TableFormat::Json => Self::Json,
            TableFormat::Csv => Self::Csv,
        }
    }
}

impl FromRequestParts<AppState> for TableFormat {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["format"], &mut faults);
        match ResultFormat::of(&given, &parts.headers, &TABLES, faults)? {
            ResultFormat::Csv => Ok(Self::Csv),
            _ => Ok(Self::Json),
        }
    }
}

/// The form the client likes best of those on offer; none when it takes none of them.
fn accepted(headers: &HeaderMap, offer: &Offer) -> Option<ResultFormat> {
    let offers: Vec<_> = offer.formats.iter().map(|&format| (format, format.media_type())).collect();
    best(headers, &offers)
}

/// Whether the client likes a stream of events better than one answer in JSON.
pub fn prefers_events(headers: &HeaderMap) -> Result<bool, ApiError> {
    best(headers, &[(false, ("application", "json")), (true, ("text", "event-stream"))])
        .ok_or(ApiError::NotAcceptable { offered: "application/json and text/event-stream" })
}

/// What the client likes best of what is on offer, the default first; none when it takes nothing of it.
fn best<T: Copy>(headers: &HeaderMap, offers: &[(T, (&str, &str))]) -> Option<T> {
    let ranges: Vec<Range> = headers
        .get_all(header::ACCEPT)
        .iter()
        .filter_map(|value| value.to_str().ok())
        .flat_map(|value| value.split(','))
        .filter_map(Range::parse)
        .collect();
    if ranges.is_empty() {
        return offers.first().map(|&(offer, _)| offer);
    }
    let quality = |media_type| {
        // The most specific range that covers the form decides.
        let covering = ranges.iter().filter(|range| range.covers(media_type));
        covering.max_by_key(|range| range.specificity()).map_or(0.0, |range| range.quality)
    };
    let mut best: Option<(f32, T)> = None;
    for &(offer, media_type) in offers {
        let q = quality(media_type);
        if q > best.map_or(0.0, |(q, _)| q) {
            best = Some((q, offer));
        }
    }
    best.map(|(_, offer)| offer)
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

    fn covers(&self, (kind, subtype): (&str, &str)) -> bool {
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
        use ResultFormat::{Csv, Html, Json, Svg};
        // What browsers send from their address bar and for an <img>, as three of them do: from memory.
        let page = "text/html,application/xhtml+xml,application/xml;q=0.9,image/avif,image/webp,image/apng,*/*;q=0.8";
        let picture = "image/avif,image/webp,image/apng,image/svg+xml,image/*,*/*;q=0.8";
        for (accept, expected) in [
            ("*/*", Some(Json)),
            ("text/csv", Some(Csv)),
            ("application/json;q=0.5, text/csv", Some(Csv)),
            ("text/*, application/json;q=0.1", Some(Csv)),
            (page, Some(Html)),
            (picture, Some(Svg)),
            ("image/*", Some(Svg)),
            ("text/html", Some(Html)),
            ("image/svg+xml;q=0.2, text/html;q=0.3, */*;q=0.1", Some(Html)),
            ("*/*, application/json;q=0", Some(Csv)),
            ("image/png", None),
            ("application/json;q=0", None),
            ("nonsense", Some(Json)),
        ] {
            let headers = HeaderMap::from_iter([(header::ACCEPT, HeaderValue::from_static(accept))]);
            assert_eq!(accepted(&headers, &FACES), expected, "{accept}");
        }
        assert_eq!(accepted(&HeaderMap::new(), &FACES), Some(Json));
    }

    #[test]
    fn rows_have_no_pictures() {
        for (accept, expected) in [
            ("image/svg+xml", None),
            ("text/html", None),
            ("text/html, */*;q=0.8", Some(ResultFormat::Json)),
            ("text/*", Some(ResultFormat::Csv)),
        ] {
            let headers = HeaderMap::from_iter([(header::ACCEPT, HeaderValue::from_static(accept))]);
            assert_eq!(accepted(&headers, &TABLES), expected, "{accept}");
        }
    }

    #[test]
    fn a_stream_is_for_who_asks_for_one() {
        for (accept, expected) in [
            ("*/*", Some(false)),
            ("text/event-stream", Some(true)),
            ("text/event-stream, application/json;q=0.9", Some(true)),
            ("text/csv", None),
        ] {
            let headers = HeaderMap::from_iter([(header::ACCEPT, HeaderValue::from_static(accept))]);
            assert_eq!(prefers_events(&headers).ok(), expected, "{accept}");
        }
    }
}

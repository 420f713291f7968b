//! The body of a source.

use serde::Serialize;
use serde_json::value::RawValue;
use utoipa::ToSchema;

use crate::api::decode::{At, Faults, every, instant, object, text, whole};
use crate::service::{DEFAULT_TIMEOUT_SECONDS, MAX_QUERY_CHARS, SourceTerms};

/// Fields of a source.
const SOURCE_FIELDS: [&str; 5] = ["database", "query", "every", "starts_at", "timeout_seconds"];

/// Longest name of a database, characters.
const MAX_NAME_CHARS: usize = 100;
/// Longest time a query may ask for, seconds; the service's own bound is lower.
const MOST_SECONDS: u64 = 86_400;

/// Where a network's degree counts come from. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct SourceBody {
    /// The database, by the name that whoever runs the service lists it under.
    #[schema(min_length = 1, max_length = 100, examples("links"))]
    pub database: String,
    /// A single SELECT whose columns are named `degree` and `nodes`, whole numbers, one row a degree.
    #[schema(
        min_length = 1,
        max_length = 20000,
        examples(
            "SELECT degree, count(*) AS nodes FROM (SELECT count(*) AS degree FROM links GROUP BY target) AS counted GROUP BY degree"
        )
    )]
    pub query: String,
    /// Time from one run to the next, an ISO 8601 duration.
    #[schema(examples("P1D"))]
    pub every: String,
    /// RFC 3339: when the first run is due, and what later ones are counted from; now, when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, examples("2026-12-01T03:00:00Z"))]
    pub starts_at: Option<String>,
    /// Longest time that the query may take, seconds; 60 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 1, maximum = 86400)]
    pub timeout_seconds: Option<u64>,
}

/// Reads a source.
pub fn read_source(raw: &RawValue, faults: &mut Faults) -> Option<SourceTerms> {
    let root = At::ROOT;
    let given = object(raw, root, &SOURCE_FIELDS, faults)?;
    let database = given.required("database", &root, faults);
    let database = database.and_then(|raw| words(raw, root.field("database"), MAX_NAME_CHARS, faults));
    let query = given.required("query", &root, faults);
    let query = query.and_then(|raw| words(raw, root.field("query"), MAX_QUERY_CHARS, faults));
    let step = given.required("every", &root, faults).and_then(|raw| every(raw, root.field("every"), faults));
    let starts_at = match given.get("starts_at") {
        Some(raw) => instant(raw, root.field("starts_at"), faults).map(Some),
        None => Some(None),
    };
    let seconds = match given.get("timeout_seconds") {
        Some(raw) => seconds(raw, root.field("timeout_seconds"), faults),
        None => Some(DEFAULT_TIMEOUT_SECONDS),
    };
    Some(SourceTerms {
        database: database?,
        query: query?,
        every: step?,
        starts_at: starts_at?,
        timeout_seconds: seconds?,
    })
}

fn words(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<String> {
    let text = text(raw, at, faults)?;
    let length = text.chars().count();
    let fault = if text.trim().is_empty() {
        "it is empty".to_owned()
    } else if length > most {
        format!("{length} characters are more than the {most} that are taken")
    } else if text.contains('\0') {
        "it holds a NUL character".to_owned()
    } else {
        return Some(text);
    };
    faults.add(&at, fault);
    None
}

fn seconds(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<u64> {
    let found = whole(raw, at, MOST_SECONDS, faults)?;
    if found == 0 {
        faults.add(&at, "a query needs at least 1 s");
        return None;
    }
    Some(found)
}

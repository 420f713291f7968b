//! What handlers take from a request, each refused with a problem document.

mod body;
mod format;
mod forms;
mod key;
mod link_list;
mod listing;
mod patience;
mod place;

pub use body::{JsonBody, OptionalJsonBody, RowsBody, faultless, read_json};
pub use format::{ResultFormat, TableFormat, accepts_events, prefers_events};
pub use forms::{
    BacktestForm, BacktestFormQuery, ComparisonForm, ComparisonFormQuery, FitForm, FitFormQuery, ForecastForm,
    ForecastFormQuery,
};
pub use key::IdempotencyKey;
pub use link_list::LinkListBody;
pub use listing::Listing;
pub use patience::Patience;
pub use place::{date, network_name, question_name};

use axum::extract::FromRequestParts;
use axum::http::Uri;
use axum::http::request::Parts;
use serde::de::DeserializeOwned;
use uuid::Uuid;

use super::decode::{Fault, Faults, Place, unknown_name};
use super::{ApiError, AppState};
use crate::service::{ServiceError, Thing};

/// Reads a run's id from a path; what is no id belongs to no run.
pub fn run_id(text: &str) -> Result<Uuid, ApiError> {
    Uuid::try_parse(text).map_err(|_| ServiceError::NotFound(Thing::Run).into())
}

/// The query's parameters, each known and given once.
pub fn parameters(uri: &Uri, known: &[&str], faults: &mut Faults) -> Vec<(String, String)> {
    let pairs = decode_query::<Vec<(String, String)>>(uri).unwrap_or_default();
    if !is_utf8(uri.query().unwrap_or_default()) {
        // The decoder puts the replacement character where there is none, which would look for what nobody asked.
        let named = pairs.iter().find(|(name, value)| name.contains('\u{fffd}') || value.contains('\u{fffd}'));
        let name = named.map(|(name, _)| name.chars().take(60).collect()).unwrap_or_default();
        let detail = "what its percent signs stand for is not UTF-8".to_owned();
        faults.push(Fault { place: Place::Query(name), detail });
    }
    for (i, (name, _)) in pairs.iter().enumerate() {
        let mut fault = |detail| faults.push(Fault { place: Place::Query(name.chars().take(60).collect()), detail });
        if !known.contains(&name.as_str()) {
            fault(unknown_name("parameter", name, known));
        } else if pairs[..i].iter().any(|(earlier, _)| earlier == name) {
            fault(format!("the parameter {name:?} is given twice"));
        }
    }
    pairs
}

/// No query: a parameter that would be ignored is refused.
#[derive(Debug, Clone, Copy)]
pub struct NoQuery;

impl FromRequestParts<AppState> for NoQuery {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        parameters(&parts.uri, &[], &mut faults);
        if faults.is_empty() { Ok(Self) } else { Err(ApiError::Invalid(faults)) }
    }
}

/// Whether a query is UTF-8 once its percent signs are decoded.
fn is_utf8(query: &str) -> bool {
    let (mut bytes, mut rest) = (Vec::with_capacity(query.len()), query.as_bytes());
    while let Some((&byte, after)) = rest.split_first() {
        let hex = after.get(..2).and_then(|digits| u8::from_str_radix(std::str::from_utf8(digits).ok()?, 16).ok());
        let (decoded, taken) = match hex {
            Some(decoded) if byte == b'%' => (decoded, 3),
            _ => (byte, 1),
        };
        bytes.push(decoded);
        rest = rest.get(taken..).unwrap_or_default();
    }
    std::str::from_utf8(&bytes).is_ok()
}

fn decode_query<T: DeserializeOwned>(uri: &Uri) -> Option<T> {
    axum::extract::Query::<T>::try_from_uri(uri).ok().map(|query| query.0)
}

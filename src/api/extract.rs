//! What handlers take from a request, each refused with a problem document.

mod body;
mod format;
mod key;
mod listing;

pub use body::{JsonBody, read_json};
pub use format::ResultFormat;
pub use key::IdempotencyKey;
pub use listing::Listing;

use axum::http::Uri;
use serde::de::DeserializeOwned;
use uuid::Uuid;

use super::ApiError;
use super::decode::{Fault, Faults, Place, unknown_name};
use crate::service::ServiceError;

/// Reads a run's id from a path; what is no id belongs to no run.
pub fn run_id(text: &str) -> Result<Uuid, ApiError> {
    Uuid::try_parse(text).map_err(|_| ServiceError::NotFound.into())
}

/// The query's parameters, each known and given once.
fn parameters(uri: &Uri, known: &[&str], faults: &mut Faults) -> Vec<(String, String)> {
    let pairs = decode_query::<Vec<(String, String)>>(uri).unwrap_or_default();
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

fn decode_query<T: DeserializeOwned>(uri: &Uri) -> Option<T> {
    axum::extract::Query::<T>::try_from_uri(uri).ok().map(|query| query.0)
}

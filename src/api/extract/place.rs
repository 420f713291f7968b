//! Names and dates in paths.

use jiff::Timestamp;

use crate::api::ApiError;
use crate::api::decode::{Place, instant_of};
use crate::service::{NameFault, NetworkName, QuestionName};

/// The earliest date that is stored.
const FIRST_STORED: &str = "0000-01-01T00:00:00Z";

/// Reads a network's name.
pub fn network_name(text: &str) -> Result<NetworkName, ApiError> {
    NetworkName::new(text).map_err(|fault| ApiError::fault(Place::Query("name".into()), fault.to_string()))
}

/// Reads the name of a kept limit or scenario.
pub fn question_name(place: &'static str, text: &str) -> Result<QuestionName, ApiError> {
    let detail = || {
        let rules = NameFault.to_string();
        rules.strip_prefix("a network's name").map_or(rules.clone(), |rest| format!("a {place}'s name{rest}"))
    };
    QuestionName::new(text).map_err(|_| ApiError::fault(Place::Query(place.into()), detail()))
}

/// Reads a date that evidence is stored under.
pub fn date(name: &'static str, text: &str) -> Result<Timestamp, ApiError> {
    let fault = |detail: String| ApiError::fault(Place::Query(name.into()), detail);
    let date = instant_of(text).map_err(fault)?;
    // An offset can lead a little beyond the first year.
    if date < FIRST_STORED.parse().unwrap_or(Timestamp::MIN) {
        return Err(fault(format!("{text} is before {FIRST_STORED}, the earliest date that is stored")));
    }
    Ok(date)
}

//! How values stand in columns.

use std::fmt::Display;
use std::str::FromStr;

use jiff::Timestamp;
use uuid::Uuid;

use super::StoreError;
use crate::model::DegreeKind;

/// Now, as finely as times are kept: what an answer tells of a thing that was just stored is what is read of it later.
pub fn kept_now() -> Timestamp {
    let now = Timestamp::now();
    Timestamp::from_microsecond(now.as_microsecond()).unwrap_or(now)
}

/// A date in the one form that sorts as time does: RFC 3339 in UTC with nine decimals, 30 characters.
pub fn date_key(time: Timestamp) -> String {
    format!("{time:.9}")
}

/// A date from its column.
pub fn date(text: &str) -> Result<Timestamp, StoreError> {
    text.parse().map_err(|_| corrupt("a date", text))
}

/// A total kept as decimal text.
pub fn total<T: FromStr>(column: &str, text: &str) -> Result<T, StoreError> {
    text.parse().map_err(|_| corrupt(column, text))
}

/// A number that was never negative.
pub fn unsigned(column: &str, value: i64) -> Result<u64, StoreError> {
    u64::try_from(value).map_err(|_| corrupt(column, value))
}

/// A number that never was beyond a BIGINT.
pub fn signed(column: &str, value: u64) -> Result<i64, StoreError> {
    i64::try_from(value).map_err(|_| corrupt(column, value))
}

/// A time kept as microseconds.
pub fn time(micros: i64) -> Result<Timestamp, StoreError> {
    Timestamp::from_microsecond(micros).map_err(|_| corrupt("a time", micros))
}

/// An id.
pub fn uuid(text: &str) -> Result<Uuid, StoreError> {
    Uuid::parse_str(text).map_err(|_| corrupt("id", text))
}

/// The name of a kind of degree.
pub fn kind_name(kind: DegreeKind) -> &'static str {
    match kind {
        DegreeKind::Received => "received",
        DegreeKind::Total => "total",
    }
}

/// A kind of degree from its column.
pub fn kind(name: &str) -> Result<DegreeKind, StoreError> {
    [DegreeKind::Received, DegreeKind::Total]
        .into_iter()
        .find(|&kind| kind_name(kind) == name)
        .ok_or_else(|| corrupt("degree_kind", name))
}

/// A value that was never written.
pub fn corrupt(column: &str, value: impl Display) -> StoreError {
    StoreError::Corrupt(format!("{column} = {value}"))
}

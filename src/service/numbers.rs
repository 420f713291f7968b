//! Numbers and dates as they are written in answers.

use jiff::{Timestamp, civil::Time, tz::TimeZone};
use serde::{Deserialize, Serialize, Serializer, ser::Error};
use utoipa::ToSchema;

/// Whole numbers up to here are kept exactly by every JSON reader.
const EXACT_WHOLE: f64 = 9_007_199_254_740_992.0; // 2^53

/// A finite real number. Writing one that is not finite is an error: JSON would turn it into null without a word.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Deserialize, ToSchema)]
#[serde(transparent)]
#[schema(value_type = f64)]
pub struct Real(pub f64);

/// A count at a date that is past: written without a fraction when it is whole.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Deserialize, ToSchema)]
#[serde(transparent)]
#[schema(value_type = f64)]
pub struct Count(pub f64);

impl Serialize for Real {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        if self.0.is_finite() { serializer.serialize_f64(self.0) } else { Err(not_finite(self.0)) }
    }
}

impl Serialize for Count {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let Self(value) = *self;
        if !value.is_finite() {
            Err(not_finite(value))
        } else if value.fract() == 0.0 && (0.0..EXACT_WHOLE).contains(&value) {
            serializer.serialize_u64(value as u64) // exact: whole and below 2^53
        } else {
            serializer.serialize_f64(value)
        }
    }
}

fn not_finite<E: Error>(value: f64) -> E {
    E::custom(format!("{value} is not a finite number"))
}

/// A time as it is written in answers: the bare date when it is 00:00 UTC, RFC 3339 otherwise.
///
/// ```
/// let time = "2026-12-01T00:00:00Z".parse().unwrap();
/// assert_eq!(tailcast::service::date_text(time), "2026-12-01");
/// ```
pub fn date_text(time: Timestamp) -> String {
    let civil = TimeZone::UTC.to_datetime(time);
    if civil.time() == Time::midnight() { civil.date().to_string() } else { time.to_string() }
}

/// The time that [`date_text`] wrote.
pub fn date_of(text: &str) -> Option<Timestamp> {
    text.parse().or_else(|_| format!("{text}T00:00:00Z").parse()).ok()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_number_that_is_not_finite_cannot_be_written() {
        assert!(serde_json::to_string(&Real(f64::NAN)).is_err());
        assert!(serde_json::to_string(&Count(f64::INFINITY)).is_err());
        assert_eq!(serde_json::to_string(&(Count(3.0), Count(2.5), Real(3.0))).unwrap(), "[3,2.5,3.0]");
    }
}

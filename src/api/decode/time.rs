//! Times and durations.

use jiff::{Span, Timestamp, civil::Date, tz::TimeZone};
use serde_json::value::RawValue;

use super::{At, Faults, text};

/// Length of a bare date, `YYYY-MM-DD`.
const BARE_DATE_CHARS: usize = 10;

/// A time: RFC 3339, or a bare date that means 00:00 UTC.
pub fn instant(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Timestamp> {
    let text = text(raw, at, faults)?;
    let parsed = if text.len() == BARE_DATE_CHARS {
        text.parse::<Date>().and_then(|date| date.to_zoned(TimeZone::UTC)).map(|zoned| zoned.timestamp())
    } else if text.ends_with(']') {
        // The parser takes a zone's name in brackets, RFC 3339 does not.
        Err(jiff::Error::from_args(format_args!("a zone's name in brackets is not part of RFC 3339")))
    } else {
        text.parse::<Timestamp>()
    };
    match parsed {
        Ok(time) => Some(time),
        Err(error) => {
            let shown: String = text.chars().take(60).collect();
            let detail =
                format!("{shown:?} is no time: {error}; write a date as 2026-12-01, or a time as 2026-12-01T08:30:00Z");
            faults.add(&at, detail);
            None
        }
    }
}

/// A repeating step: an ISO 8601 duration longer than nothing, such as P1M or P30D.
pub fn every(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Span> {
    let text = text(raw, at, faults)?;
    // The parser takes a friendlier form too; what ISO 8601 calls a duration starts with P.
    let span = text.starts_with('P').then(|| text.parse::<Span>().ok()).flatten().filter(|span| span.is_positive());
    if span.is_none() {
        let shown: String = text.chars().take(60).collect();
        let detail =
            format!("{shown:?} is no ISO 8601 duration longer than nothing; write P1M for a month, P30D for 30 days");
        faults.add(&at, detail);
    }
    span
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Option<String> {
        let mut faults = Faults::default();
        let json = serde_json::to_string(text).unwrap();
        instant(serde_json::from_str(&json).unwrap(), At::ROOT, &mut faults).map(|time| time.to_string())
    }

    #[test]
    fn a_bare_date_is_midnight_utc() {
        assert_eq!(read("2026-12-01").unwrap(), "2026-12-01T00:00:00Z");
        assert_eq!(read("2026-12-01T01:30:00+01:00").unwrap(), "2026-12-01T00:30:00Z");
        for text in ["2026-02-30", "20261201", "2026-12-01T00:00:00", "2026-12-01T00:00:00Z[UTC]", "tomorrow", ""] {
            assert_eq!(read(text), None, "{text}");
        }
    }

    #[test]
    fn a_step_goes_forward() {
        let read = |text: &str| {
            let json = serde_json::to_string(text).unwrap();
            every(serde_json::from_str(&json).unwrap(), At::ROOT, &mut Faults::default())
        };
        assert!(read("P1M").is_some() && read("PT6H").is_some() && read("P1Y2M3D").is_some());
        for text in ["P0D", "-P1D", "1 month", "P", ""] {
            assert!(read(text).is_none(), "{text}");
        }
    }
}

//! Times and durations.

use jiff::{Span, Timestamp, civil::Date, tz::TimeZone};
use serde_json::value::RawValue;

use super::{At, Faults, text};

/// Length of a bare date, `YYYY-MM-DD`.
const BARE_DATE_CHARS: usize = 10;
/// First and last day that RFC 3339 and the calendar's arithmetic both reach.
const FIRST_DATE: &str = "0000-01-01";
const LAST_DATE: &str = "9999-12-30";

/// A time: RFC 3339, or a bare date that means 00:00 UTC.
pub fn instant(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Timestamp> {
    let found = instant_of(&text(raw, at, faults)?);
    found.map_err(|detail| faults.add(&at, detail)).ok()
}

/// The time that a text tells, or why it tells none.
pub fn instant_of(text: &str) -> Result<Timestamp, String> {
    // The parser takes signed years and a zone's name in brackets too, RFC 3339 does not.
    let plain = text.starts_with(|c: char| c.is_ascii_digit()) && !text.ends_with(']');
    let parsed = if text.len() == BARE_DATE_CHARS {
        text.parse::<Date>().and_then(|date| date.to_zoned(TimeZone::UTC)).map(|zoned| zoned.timestamp())
    } else {
        text.parse::<Timestamp>()
    };
    parsed.ok().filter(|_| plain).ok_or_else(|| {
        let shown: String = text.chars().take(60).collect();
        format!("{shown:?} {}", why_no_time(text))
    })
}

/// What is wrong with a text that is no time.
fn why_no_time(text: &str) -> String {
    let (day, rest) = text.split_at_checked(BARE_DATE_CHARS).unwrap_or((text, ""));
    let shaped = day.len() == BARE_DATE_CHARS
        && day.bytes().enumerate().all(|(i, byte)| if i == 4 || i == 7 { byte == b'-' } else { byte.is_ascii_digit() });
    let offset = rest.ends_with(['Z', 'z']) || rest.contains(['+', '-']);
    let why = if !shaped || text.ends_with(']') {
        "is no time of RFC 3339"
    } else if day.parse::<Date>().is_err() {
        "is no time: the calendar has no such day"
    } else if rest.is_empty() || day >= LAST_DATE {
        return format!("is out of range: dates from {FIRST_DATE} to {LAST_DATE} are taken");
    } else if !offset {
        "is no time: a time of day needs its offset from UTC, such as Z"
    } else {
        "is no time: there is no such time of day or offset"
    };
    format!("{why}; write a date as 2026-12-01, or a time as 2026-12-01T08:30:00Z")
}

/// A repeating step: an ISO 8601 duration longer than nothing, such as P1M or P30D.
pub fn every(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Span> {
    let found = every_of(&text(raw, at, faults)?);
    found.map_err(|detail| faults.add(&at, detail)).ok()
}

/// The step that a text tells, or why it tells none.
pub fn every_of(text: &str) -> Result<Span, String> {
    // The parser takes a friendlier form too; what ISO 8601 calls a duration starts with P.
    let span = text.starts_with('P').then(|| text.parse::<Span>().ok()).flatten().filter(|span| span.is_positive());
    span.ok_or_else(|| {
        let shown: String = text.chars().take(60).collect();
        format!("{shown:?} is no ISO 8601 duration longer than nothing; write P1M for a month, P30D for 30 days")
    })
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
    fn what_is_no_time_is_told_in_plain_words() {
        for (text, words) in [
            ("9999-12-31", "out of range: dates from 0000-01-01 to 9999-12-30"),
            ("9999-12-31T00:00:00Z", "out of range"),
            ("2026-02-30", "no such day"),
            ("2026-13-01T00:00:00Z", "no such day"),
            ("2026-12-01T00:00:00", "offset from UTC"),
            ("2026-12-01T25:00:00Z", "no such time of day"),
            ("2026-12-01T00:00:00Z[UTC]", "RFC 3339"),
            ("-000001-01-01", "RFC 3339"),
            ("soon", "RFC 3339"),
            ("", "RFC 3339"),
            ("äöüäö-äö-äö", "RFC 3339"),
        ] {
            let mut faults = Faults::default();
            let json = serde_json::to_string(text).unwrap();
            assert_eq!(instant(serde_json::from_str(&json).unwrap(), At::ROOT, &mut faults), None, "{text}");
            let detail = faults.into_parts().0.remove(0).detail;
            assert!(detail.contains(words) && !detail.contains("Unix"), "{text}: {detail}");
        }
        assert_eq!(read("9999-12-30").unwrap(), "9999-12-30T00:00:00Z");
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

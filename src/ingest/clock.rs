//! Times as lists write them.

use jiff::{Timestamp, civil::Date, tz::TimeZone};

use super::report::shown;

/// Length of a bare date, `YYYY-MM-DD`.
const DATE_BYTES: usize = 10;
/// Times that RFC 3339 and the calendar's arithmetic both reach: from 0000-01-01 on, and before 9999-12-30, seconds.
const FIRST: i64 = -62_167_219_200;
const END: i64 = 253_402_128_000;
const END_DAY: &[u8] = b"9999-12-30";

/// Reads times; remembers the last day and the last text, for the next time is often of the same day or the very same.
#[derive(Debug, Default)]
pub struct Clock {
    text: Vec<u8>,
    /// What `text` says.
    time: Option<Timestamp>,
    /// A date and the second it begins at.
    day: Option<([u8; DATE_BYTES], i64)>,
}

impl Clock {
    /// The time that `text` says; none when it says none, see [`why_no_time`].
    #[inline]
    pub fn read(&mut self, text: &[u8]) -> Option<Timestamp> {
        self.same_day(text).or_else(|| self.any(text))
    }

    /// `T08:30:00Z`, with or without a fraction, on the day read last.
    #[inline]
    fn same_day(&self, text: &[u8]) -> Option<Timestamp> {
        let (day, rest) = text.split_first_chunk::<DATE_BYTES>()?;
        let [b'T', h1, h2, b':', m1, m2, b':', s1, s2, fraction @ .., b'Z'] = rest else { return None };
        let two = |tens: u8, ones: u8| match (tens.wrapping_sub(b'0'), ones.wrapping_sub(b'0')) {
            (tens @ 0..=9, ones @ 0..=9) => Some(i64::from(10 * tens + ones)),
            _ => None,
        };
        let (hour, minute, second) = (two(*h1, *h2)?, two(*m1, *m2)?, two(*s1, *s2)?);
        let (known, midnight) = self.day?;
        if *day != known || hour > 23 || minute > 59 || second > 59 {
            return None;
        }
        let nanoseconds = match fraction {
            [] => 0,
            [b'.', digits @ ..] => nanoseconds(digits)?,
            _ => return None,
        };
        Timestamp::new(midnight + 3_600 * hour + 60 * minute + second, nanoseconds).ok()
    }

    fn any(&mut self, text: &[u8]) -> Option<Timestamp> {
        if text == self.text && self.time.is_some() {
            return self.time;
        }
        let time = epoch(text).or_else(|| calendar(text)).filter(in_range)?;
        let day = text.first_chunk::<DATE_BYTES>().and_then(|day| Some((*day, midnight(day)?.as_second())));
        self.day = day.or(self.day);
        self.text.clear();
        self.text.extend_from_slice(text);
        self.time = Some(time);
        self.time
    }
}

fn in_range(time: &Timestamp) -> bool {
    (FIRST..END).contains(&time.as_second())
}

/// Up to nine digits of a fraction of a second.
fn nanoseconds(digits: &[u8]) -> Option<i32> {
    if digits.is_empty() || digits.len() > 9 || !digits.iter().all(u8::is_ascii_digit) {
        return None;
    }
    let value = digits.iter().fold(0, |value, digit| 10 * value + i32::from(digit - b'0'));
    Some(value * 10i32.pow(9 - digits.len() as u32))
}

/// Seconds since 1970 with up to nine decimals.
fn epoch(text: &[u8]) -> Option<Timestamp> {
    let text = std::str::from_utf8(text).ok()?;
    let (whole, fraction) = text.split_once('.').map_or((text, None), |(whole, fraction)| (whole, Some(fraction)));
    let digits = whole.strip_prefix('-').unwrap_or(whole);
    if digits.is_empty() || !digits.bytes().all(|byte| byte.is_ascii_digit()) {
        return None;
    }
    let nanoseconds = fraction.map_or(Some(0), |digits| nanoseconds(digits.as_bytes()))?;
    let sign = if whole.starts_with('-') { -1 } else { 1 };
    Timestamp::new(whole.parse().ok()?, sign * nanoseconds).ok()
}

/// Seconds since 1970 as a number that has lost its digits.
pub fn from_seconds(seconds: f64) -> Option<Timestamp> {
    let whole = seconds.floor();
    let inside = (FIRST as f64..END as f64).contains(&whole);
    // A double of this size is exact to about 10^-7 s; microseconds are the digits that were meant.
    let nanoseconds = ((seconds - whole) * 1e6).round() as i64 * 1_000;
    let time = jiff::SignedDuration::new(whole as i64, 0).checked_add(jiff::SignedDuration::from_nanos(nanoseconds))?;
    Timestamp::from_duration(time).ok().filter(|_| inside)
}

/// RFC 3339, or a bare date.
fn calendar(text: &[u8]) -> Option<Timestamp> {
    let (day, rest) = text.split_first_chunk::<DATE_BYTES>()?;
    if rest.is_empty() {
        return midnight(day);
    }
    // The parser takes signed years and a zone's name in brackets too, RFC 3339 does not.
    let plain = text.starts_with(&day[..4]) && day[0].is_ascii_digit() && day[4] == b'-' && day[7] == b'-';
    let text = std::str::from_utf8(text).ok().filter(|text| plain && !text.ends_with(']'))?;
    text.parse().ok()
}

fn midnight(day: &[u8; DATE_BYTES]) -> Option<Timestamp> {
    if !(day[0].is_ascii_digit() && day[4] == b'-' && day[7] == b'-') {
        return None;
    }
    let date: Date = std::str::from_utf8(day).ok()?.parse().ok()?;
    Some(date.to_zoned(TimeZone::UTC).ok()?.timestamp())
}

/// What is wrong with a text that says no time.
pub fn why_no_time(text: &[u8]) -> String {
    let seconds = std::str::from_utf8(text).ok().and_then(|text| text.parse::<f64>().ok()).filter(|x| x.is_finite());
    let offset = text.get(DATE_BYTES..).is_some_and(|rest| rest.iter().any(|byte| b"Zz+-".contains(byte)));
    let date = |day| std::str::from_utf8(day).ok()?.parse::<Date>().ok();
    let dated = text.get(..DATE_BYTES).and_then(date).is_some();
    let why = if seconds.is_some_and(|seconds| !(FIRST as f64..END as f64).contains(&seconds)) {
        "is out of range; times in numbers are seconds, so divide milliseconds by 1000"
    } else if dated && text.len() > DATE_BYTES && !offset {
        "needs its offset from UTC, such as Z at its end"
    } else if dated && text >= END_DAY {
        "is out of range: dates from 0000-01-01 to 9999-12-29 are taken"
    } else {
        "is none; write it as 2026-12-01T08:30:00Z, as 2026-12-01, or as seconds since 1970 with up to nine decimals"
    };
    format!("the time {} {why}", shown(text))
}

//! Words and figures on charts.

use jiff::civil::Date;
use jiff::{Timestamp, tz::TimeZone};

use super::super::csv::percent;
use super::super::text::figure;
use crate::service::date_of;

/// Seconds of a day.
const DAY: f64 = 86_400.0;
/// Longest name that is shown; the document has it whole.
pub(super) const NAME: usize = 40;

/// Somebody's text on one line of at most `most` characters, without what XML cannot hold or would turn the line about.
pub(super) fn clean(text: &str, most: usize) -> String {
    let turning = |c: char| matches!(c, '\u{200E}' | '\u{200F}' | '\u{202A}'..='\u{202E}' | '\u{2066}'..='\u{2069}');
    let absent = |c: char| c.is_control() || turning(c) || matches!(c, '\u{FFFE}' | '\u{FFFF}');
    let spaced: String = text.chars().map(|c| if absent(c) { ' ' } else { c }).collect();
    let line = spaced.split_whitespace().collect::<Vec<_>>().join(" ");
    if line.chars().count() <= most {
        return line;
    }
    line.chars().take(most.saturating_sub(1)).collect::<String>().trim_end().to_owned() + "…"
}

/// The hubs past a threshold.
pub(super) fn hubs(threshold: u64) -> String {
    format!("Hubs with {}", at_least(threshold))
}

/// A threshold in words.
pub(super) fn at_least(threshold: u64) -> String {
    let links = if threshold == 1 { "link" } else { "links" };
    format!("{} {links} or more", figure(threshold as f64))
}

/// An interval's level and ends.
pub(super) fn interval(level: f64, low: f64, high: f64) -> String {
    format!("{} % interval {} to {}", percent(level), count(low), count(high))
}

/// A count of nodes: whole from ten on, for nobody plans for a tenth of a hub.
pub(super) fn count(value: f64) -> String {
    figure(if value >= 10.0 { value.round() } else { value })
}

/// A share as per cent.
pub(super) fn share(value: f64) -> String {
    match value * 100.0 {
        v if v > 0.0 && v < 1.0 => "under 1 %".to_owned(),
        v if v > 99.0 && v < 100.0 => "over 99 %".to_owned(),
        v => format!("{v:.0} %"),
    }
}

/// Days since 1970, of a date as answers write it.
pub(super) fn days(date: &str) -> Option<f64> {
    date_of(date).map(|time| time.as_second() as f64 / DAY)
}

/// The calendar date of days since 1970; the ends of the calendar for days beyond them.
pub(super) fn date_at(days: f64) -> Date {
    let end = if days < 0.0 { Timestamp::MIN } else { Timestamp::MAX };
    let time = Timestamp::from_second((days * DAY).round() as i64).unwrap_or(end);
    TimeZone::UTC.to_datetime(time).date()
}

/// "3 March 2027".
pub(super) fn day_in_words(date: &str) -> String {
    days(date).map_or_else(|| clean(date, NAME), |days| date_at(days).strftime("%-d %B %Y").to_string())
}

/// "3 Mar 2027".
pub(super) fn short_day(days: f64) -> String {
    date_at(days).strftime("%-d %b %Y").to_string()
}

/// About how many units a text is wide: no font is at hand, and none is the same on two devices.
pub(super) fn text_width(text: &str, size: f64) -> f64 {
    text.chars().count() as f64 * size * 0.54
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn texts_become_one_short_line() {
        assert_eq!(clean(" a\u{0}b\n\tc\u{202E}d\u{FFFF} ", 40), "a b c d");
        assert_eq!(clean(&"x".repeat(200), 10), "xxxxxxxxx…");
    }

    #[test]
    fn figures_and_dates_read_well() {
        assert_eq!(hubs(1), "Hubs with 1 link or more");
        assert_eq!(interval(0.9, 11.6, 1021.2), "90 % interval 12 to 1,021");
        assert_eq!(day_in_words("2027-03-03"), "3 March 2027");
        assert_eq!(short_day(days("2027-03-03T12:00:00Z").unwrap()), "3 Mar 2027");
        assert_eq!(days("no date"), None);
        assert_eq!((share(0.004), share(0.5), share(1.0)), ("under 1 %".into(), "50 %".into(), "100 %".into()));
        assert_eq!(date_at(1e300), date_at(f64::MAX));
    }
}

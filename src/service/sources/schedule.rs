//! When runs are due: at whole steps from a start, by the calendar.

use jiff::{Span, Timestamp, Unit, tz::TimeZone};

/// Steps looked at around the one that the step's usual length tells: months and years differ in length.
const MARGIN: i64 = 3;

/// The first time of the schedule that is not before `now`; the end of time when there is none.
pub fn next(start: Timestamp, every: Span, now: Timestamp) -> Timestamp {
    if start >= now {
        return start;
    }
    let zoned = start.to_zoned(TimeZone::UTC);
    let Ok(length) = every.total((Unit::Second, &zoned)) else { return Timestamp::MAX };
    let passed = now.duration_since(start).as_secs_f64();
    let first = ((passed / length.max(1e-3)) as i64).saturating_sub(MARGIN).max(0);
    // A step of a long month tells too few of shorter ones: from there on one by one.
    let mut steps = first;
    loop {
        match after(start, every, steps) {
            Some(time) if time < now => steps = steps.saturating_add(1),
            Some(time) => return earliest(start, every, (steps, time), now),
            None => return Timestamp::MAX,
        }
    }
}

/// The time so many steps after the start.
pub fn after(start: Timestamp, every: Span, steps: i64) -> Option<Timestamp> {
    // Counted from the start each time: a month after 31 January is 28 February, two months after it 31 March.
    let span = every.checked_mul(steps).ok()?;
    Some(start.to_zoned(TimeZone::UTC).checked_add(span).ok()?.timestamp())
}

/// Goes back while an earlier time does too.
fn earliest(start: Timestamp, every: Span, (mut steps, mut found): (i64, Timestamp), now: Timestamp) -> Timestamp {
    while steps > 0 {
        match after(start, every, steps - 1) {
            Some(time) if time >= now => (steps, found) = (steps - 1, time),
            _ => break,
        }
    }
    found
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> Timestamp {
        text.parse().unwrap()
    }

    #[test]
    fn due_times_are_whole_steps_from_the_start() {
        for (start, every, now, next_due) in [
            ("2026-01-01T03:00:00Z", "P1D", "2026-12-01T02:59:59Z", "2026-12-01T03:00:00Z"),
            ("2026-01-01T03:00:00Z", "P1D", "2026-12-01T03:00:00Z", "2026-12-01T03:00:00Z"),
            ("2026-01-01T03:00:00Z", "P1D", "2026-12-01T03:00:00.000001Z", "2026-12-02T03:00:00Z"),
            ("2027-01-01T03:00:00Z", "P1D", "2026-12-01T03:00:00Z", "2027-01-01T03:00:00Z"),
            ("2024-01-31T00:00:00Z", "P1M", "2026-02-27T00:00:00Z", "2026-02-28T00:00:00Z"),
            ("2024-01-31T00:00:00Z", "P1M", "2026-03-01T00:00:00Z", "2026-03-31T00:00:00Z"),
            ("1926-02-01T00:00:00Z", "P1M", "2026-12-02T00:00:00Z", "2027-01-01T00:00:00Z"),
            ("2020-02-29T00:00:00Z", "P1Y", "2026-12-02T00:00:00Z", "2027-02-28T00:00:00Z"),
            ("2026-12-01T00:00:00Z", "PT90S", "2026-12-02T00:00:01Z", "2026-12-02T00:01:30Z"),
        ] {
            assert_eq!(next(at(start), every.parse().unwrap(), at(now)), at(next_due), "{start} {every} {now}");
        }
    }

    #[test]
    fn a_step_beyond_the_calendar_is_never_due() {
        assert_eq!(
            next(at("2026-12-01T00:00:00Z"), "P9000Y".parse().unwrap(), at("2026-12-02T00:00:00Z")),
            Timestamp::MAX
        );
    }
}

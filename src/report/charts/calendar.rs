//! Which dates a calendar axis marks.

use jiff::civil::{Date, date};

use super::words::date_at;

/// Steps between marks: days up to a fortnight, months, years.
const STEPS: [(Step, f64); 17] = [
    (Step::Days(1), 1.0),
    (Step::Days(2), 2.0),
    (Step::Days(7), 7.0),
    (Step::Days(14), 14.0),
    (Step::Months(1), 30.4),
    (Step::Months(2), 60.9),
    (Step::Months(3), 91.3),
    (Step::Months(6), 182.6),
    (Step::Months(12), 365.2),
    (Step::Months(24), 730.5),
    (Step::Months(60), 1826.0),
    (Step::Months(120), 3652.0),
    (Step::Months(240), 7305.0),
    (Step::Months(600), 18262.0),
    (Step::Months(1200), 36525.0),
    (Step::Months(6000), 182_625.0),
    (Step::Months(12_000), 365_250.0),
];
/// Marks at most.
const MOST: f64 = 8.0;

#[derive(Debug, Clone, Copy)]
enum Step {
    Days(i64),
    Months(i32),
}

/// Marked dates between two days since 1970, and how they are written.
pub(super) fn ticks(from: f64, to: f64) -> Vec<(f64, String)> {
    let step = STEPS.iter().find(|(_, days)| (to - from) / days <= MOST).or(STEPS.last());
    let Some((step, _)) = step else { return Vec::new() };
    let first = from.max(day_number(Date::MIN));
    let marks: Vec<Date> = match *step {
        Step::Days(days) => (0..).map_while(|i| marked_day(first.ceil() as i64, days, i)).take(40).collect(),
        Step::Months(months) => (0..).map_while(|i| marked_month(date_at(first), months, i)).take(40).collect(),
    };
    let format = match *step {
        Step::Days(_) => "%-d %b %Y",
        Step::Months(months) if months < 12 => "%b %Y",
        Step::Months(_) => "%Y",
    };
    let placed = marks.into_iter().map(|day| (day_number(day), day.strftime(format).to_string()));
    placed.skip_while(|(at, _)| *at < from).take_while(|(at, _)| *at <= to).collect()
}

/// The i-th multiple of `step` days since 1970 from `first` on.
fn marked_day(first: i64, step: i64, i: i64) -> Option<Date> {
    let day = (first + step - 1).div_euclid(step).checked_add(i)?.checked_mul(step)?;
    Some(date_at(day as f64))
}

/// The i-th first of a month whose number is a multiple of `step`, from the one before `first` on.
fn marked_month(first: Date, step: i32, i: i32) -> Option<Date> {
    let months = i32::from(first.year()) * 12 + i32::from(first.month()) - 1;
    let month = months.div_euclid(step).checked_add(i)?.checked_mul(step)?;
    let (year, month) = (month.div_euclid(12), month.rem_euclid(12) + 1);
    Date::new(i16::try_from(year).ok()?, i8::try_from(month).ok()?, 1).ok()
}

fn day_number(day: Date) -> f64 {
    let since = date(1970, 1, 1).until(day).map_or(0, |span| span.get_days());
    f64::from(since)
}

#[cfg(test)]
mod tests {
    use super::super::words::days;
    use super::*;

    fn texts(from: &str, to: &str) -> Vec<String> {
        ticks(days(from).unwrap(), days(to).unwrap()).into_iter().map(|(_, text)| text).collect()
    }

    #[test]
    fn marks_suit_the_span() {
        assert_eq!(
            texts("2027-03-30", "2027-04-03"),
            ["30 Mar 2027", "31 Mar 2027", "1 Apr 2027", "2 Apr 2027", "3 Apr 2027"]
        );
        assert_eq!(
            texts("2026-05-20", "2026-12-02"),
            ["Jun 2026", "Jul 2026", "Aug 2026", "Sep 2026", "Oct 2026", "Nov 2026", "Dec 2026"]
        );
        assert_eq!(texts("2021-08-14", "2027-08-09"), ["2022", "2023", "2024", "2025", "2026", "2027"]);
    }

    #[test]
    fn marks_lie_on_their_dates() {
        for (at, _) in ticks(days("2026-01-01").unwrap(), days("2026-07-01").unwrap()) {
            assert_eq!(date_at(at).day(), 1);
        }
    }

    #[test]
    fn spans_beyond_the_calendar_end() {
        assert!(ticks(-1e300, 1e300).len() <= 40);
        assert!(ticks(days("9999-12-01").unwrap(), 1e9).len() <= 40);
    }
}

//! The plan that a tracked network's forecasts follow: what is asked of each, counted from whatever is the newest snapshot.

use jiff::{Span, Timestamp, tz::TimeZone};

use super::{ArrivalPlan, ForecastPlan, Levels, Limit, StandingArrivals, Thresholds};

/// Most dates a horizon is spread over before it is refused; one more than a plan takes, so that the plan says why.
const MOST_STEPS: i64 = 4_001;

/// Where a horizon ends.
#[derive(Debug, Clone, Copy)]
pub enum HorizonEnd {
    /// No date comes after this one.
    Until(Timestamp),
    /// No date comes later than this after the newest snapshot.
    After(Span),
}

/// Dates in even steps from the newest snapshot on; months and years go by the calendar, in UTC.
#[derive(Debug, Clone, Copy)]
pub struct Horizon {
    /// Where it ends.
    pub end: HorizonEnd,
    /// The step, longer than nothing.
    pub every: Span,
}

impl Horizon {
    /// The dates `from + every`, `from + 2·every`, … up to and including the end; at most one more than a plan takes.
    ///
    /// ```
    /// use tailcast::model::{Horizon, HorizonEnd};
    /// let horizon = Horizon { end: HorizonEnd::After("P3M".parse().unwrap()), every: "P1M".parse().unwrap() };
    /// let dates = horizon.dates("2026-01-31T00:00:00Z".parse().unwrap());
    /// let dates: Vec<String> = dates.iter().map(ToString::to_string).collect();
    /// assert_eq!(dates, ["2026-02-28T00:00:00Z", "2026-03-31T00:00:00Z", "2026-04-30T00:00:00Z"]);
    /// ```
    pub fn dates(&self, from: Timestamp) -> Vec<Timestamp> {
        let from = from.to_zoned(TimeZone::UTC);
        let until = match self.end {
            HorizonEnd::Until(until) => until,
            // Beyond the calendar's end: the steps stop there by themselves.
            HorizonEnd::After(span) => from.checked_add(span).map_or(Timestamp::MAX, |end| end.timestamp()),
        };
        // Counted from the start each time: a month after 31 January is 28 February, two months after it 31 March.
        (1..=MOST_STEPS)
            .map_while(|count| Some(from.checked_add(self.every.checked_mul(count).ok()?).ok()?.timestamp()))
            .take_while(|&date| date <= until)
            .collect()
    }
}

/// What is asked of every forecast of a tracked network.
#[derive(Debug, Clone)]
pub struct StandingPlan {
    /// Hub thresholds.
    pub thresholds: Thresholds,
    /// Levels of the intervals.
    pub levels: Levels,
    /// Dates, from the newest snapshot on.
    pub horizon: Horizon,
    /// Arrivals; estimated when none are planned.
    pub arrivals: Option<StandingArrivals>,
}

impl StandingPlan {
    /// What is asked of the forecast from a newest snapshot of this date, its arrivals up to the last date that it or a limit is for.
    ///
    /// # Errors
    /// When the horizon ended before its first step or has too many, or planned arrivals start later; in words.
    pub fn at(&self, latest: Timestamp, limits: &[Limit]) -> Result<(ForecastPlan, Option<ArrivalPlan>), String> {
        let dates = self.horizon.dates(latest);
        if dates.is_empty() {
            let end = match self.horizon.end {
                HorizonEnd::Until(until) => format!("at {until}"),
                HorizonEnd::After(span) => format!("{span} after the newest snapshot"),
            };
            let detail = format!(
                "forecast_plan.horizon ends {end}, before its first date, one step of {} after the newest snapshot ({latest})",
                self.horizon.every
            );
            return Err(detail);
        }
        let plan = ForecastPlan::new(latest, self.thresholds.clone(), &dates, self.levels.clone());
        let plan = plan.map_err(|faults| words("horizon", faults.iter().map(|fault| &fault.detail)))?;
        let until = dates.iter().copied().chain(limits.iter().map(Limit::by)).max().unwrap_or(latest);
        let arrivals = self.arrivals.as_ref().map(|arrivals| arrivals.at(latest, until)).transpose();
        let arrivals = arrivals.map_err(|faults| words("arrivals", faults.iter().map(|fault| &fault.detail)))?;
        Ok((plan, arrivals))
    }
}

fn words<'f>(field: &str, details: impl Iterator<Item = &'f String>) -> String {
    let details: Vec<&str> = details.take(3).map(String::as_str).collect();
    format!("forecast_plan.{field}: {}", details.join("; "))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> Timestamp {
        text.parse().unwrap()
    }

    #[test]
    fn steps_follow_the_calendar_and_include_the_end() {
        let horizon = Horizon { end: HorizonEnd::Until(at("2026-04-30T00:00:00Z")), every: "P1M".parse().unwrap() };
        let dates = horizon.dates(at("2026-01-31T00:00:00Z"));
        let dates: Vec<String> = dates.iter().map(|date| date.to_string()[..10].to_owned()).collect();
        assert_eq!(dates, ["2026-02-28", "2026-03-31", "2026-04-30"]);
    }

    #[test]
    fn a_tiny_step_does_not_run_for_ever() {
        for end in [HorizonEnd::Until(at("2200-01-01T00:00:00Z")), HorizonEnd::After("P9000Y".parse().unwrap())] {
            let horizon = Horizon { end, every: "PT1S".parse().unwrap() };
            assert_eq!(horizon.dates(at("2026-01-01T00:00:00Z")).len(), 4_001);
        }
    }
}

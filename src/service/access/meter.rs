//! What a key may still ask for: requests a minute and a day.

use std::num::NonZeroU32;
use std::sync::{Mutex, MutexGuard, PoisonError};
use std::time::Duration;

use governor::clock::{Clock, MonotonicClock};
use governor::middleware::StateInformationMiddleware;
use governor::state::{InMemoryState, NotKeyed};
use governor::{Quota, RateLimiter};
use jiff::Timestamp;

const MINUTE_SECONDS: u64 = 60;
const DAY_SECONDS: u64 = 86_400;

type Limiter = RateLimiter<NotKeyed, InMemoryState, MonotonicClock, StateInformationMiddleware>;

/// Counts a key's requests, and holds them against what it is allowed.
#[derive(Debug)]
pub struct Meter {
    minute: Option<(NonZeroU32, Limiter)>,
    per_day: Option<u64>,
    used: Mutex<Used>,
}

/// Requests of a day.
#[derive(Debug, Default, Clone, Copy)]
struct Used {
    day: i64,
    /// Those that are stored, of other processes too.
    stored: u64,
    /// Those of this process since the last save.
    unsaved: u64,
    last: Option<Timestamp>,
}

/// How a limit stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Allowance {
    /// Most requests in the window.
    pub most: u64,
    /// Length of the window, seconds.
    pub window: u64,
    /// Requests left.
    pub left: u64,
    /// Seconds until all of them are there again, or, when none is left, until one is.
    pub reset: u64,
}

/// How a key's limits stand.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Standing {
    /// Of a minute.
    pub minute: Option<Allowance>,
    /// Of a day.
    pub day: Option<Allowance>,
}

/// What came of a request.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Spent {
    /// It is counted.
    Counted(Standing),
    /// The minute's requests are used up; one is there after the time given.
    TooFast(Standing, Duration),
    /// The day's requests are used up.
    UsedUp(Standing, Duration),
}

impl Meter {
    /// Nothing counted yet.
    pub fn new(per_minute: Option<u32>, per_day: Option<u64>) -> Self {
        let limiter = |most: NonZeroU32| {
            let clock = MonotonicClock;
            RateLimiter::direct_with_clock(Quota::per_minute(most), clock).with_middleware()
        };
        let minute = per_minute.and_then(NonZeroU32::new).map(|most| (most, limiter(most)));
        Self { minute, per_day, used: Mutex::default() }
    }

    /// Counts a request, if it is allowed.
    pub fn spend(&self, now: Timestamp) -> Spent {
        let mut used = self.used();
        used.turn(day_of(now));
        let to_midnight = DAY_SECONDS - now.as_second().rem_euclid(DAY_SECONDS as i64) as u64;
        let day = |used: &Used| {
            self.per_day.map(|most| Allowance {
                most,
                window: DAY_SECONDS,
                left: most.saturating_sub(used.stored + used.unsaved),
                reset: to_midnight,
            })
        };
        let before = day(&used);
        if before.is_some_and(|day| day.left == 0) {
            // The minute's are not looked at, for looking takes one.
            return Spent::UsedUp(Standing { minute: None, day: before }, Duration::from_secs(to_midnight));
        }
        let minute = match &self.minute {
            None => None,
            Some((most, limiter)) => {
                let most = u64::from(most.get());
                let stands = |left, reset| Some(Allowance { most, window: MINUTE_SECONDS, left, reset });
                match limiter.check() {
                    Ok(state) => {
                        let left = u64::from(state.remaining_burst_capacity());
                        stands(left, ((most - left.min(most)) * MINUTE_SECONDS).div_ceil(most))
                    }
                    Err(until) => {
                        let wait = until.wait_time_from(MonotonicClock.now());
                        let minute = stands(0, wait.as_millis().div_ceil(1000).max(1) as u64);
                        return Spent::TooFast(Standing { minute, day: before }, wait);
                    }
                }
            }
        };
        used.unsaved += 1;
        used.last = Some(now);
        Spent::Counted(Standing { minute, day: day(&used) })
    }

    /// Says how many requests of a day are stored.
    pub fn knows(&self, day: i64, stored: u64) {
        let mut used = self.used();
        used.turn(day);
        if used.day == day {
            used.stored = stored;
        }
    }

    /// What is to be saved: day, requests and when the last came.
    pub fn unsaved(&self) -> Option<(i64, u64, Timestamp)> {
        let used = self.used();
        used.last.filter(|_| used.unsaved > 0).map(|last| (used.day, used.unsaved, last))
    }

    /// Says that so many requests of a day were saved.
    pub fn saved(&self, day: i64, requests: u64) {
        let mut used = self.used();
        if used.day == day {
            used.stored += requests;
            used.unsaved = used.unsaved.saturating_sub(requests);
        }
    }

    fn used(&self) -> MutexGuard<'_, Used> {
        self.used.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl Used {
    /// Begins a new day. A clock that is set back does not give a day's requests again.
    fn turn(&mut self, day: i64) {
        if day > self.day {
            *self = Self { day, ..Self::default() };
        }
    }
}

/// The day of a time, since 1970-01-01 UTC.
pub fn day_of(time: Timestamp) -> i64 {
    time.as_second().div_euclid(DAY_SECONDS as i64)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> Timestamp {
        text.parse().unwrap()
    }

    #[test]
    fn a_minutes_requests_are_used_up_and_come_back_one_by_one() {
        let meter = Meter::new(Some(3), None);
        let now = at("2026-06-01T12:00:00Z");
        let left = |spent| match spent {
            Spent::Counted(Standing { minute: Some(minute), day: None }) => (minute.left, minute.reset),
            other => panic!("{other:?}"),
        };
        assert_eq!([0; 3].map(|_| left(meter.spend(now))), [(2, 20), (1, 40), (0, 60)]);
        let Spent::TooFast(standing, wait) = meter.spend(now) else { panic!("a fourth request was let in") };
        assert!(wait <= Duration::from_secs(20) && wait > Duration::from_secs(15), "{wait:?}");
        assert_eq!(standing.minute.map(|minute| (minute.left, minute.reset)), Some((0, 20)));
        assert_eq!(meter.unsaved().map(|(_, requests, _)| requests), Some(3), "what is refused is not counted");
    }

    #[test]
    fn a_days_requests_last_until_midnight_and_count_what_is_stored() {
        let meter = Meter::new(None, Some(5));
        let now = at("2026-06-01T23:59:00Z");
        meter.knows(day_of(now), 3);
        let Spent::Counted(standing) = meter.spend(now) else { panic!() };
        assert_eq!(standing.day, Some(Allowance { most: 5, window: 86_400, left: 1, reset: 60 }));
        assert!(matches!(meter.spend(now), Spent::Counted(_)));
        let Spent::UsedUp(_, wait) = meter.spend(now) else { panic!("a sixth request was let in") };
        assert_eq!(wait, Duration::from_secs(60));
        meter.saved(day_of(now), 2);
        assert_eq!(meter.unsaved(), None);
        assert!(matches!(meter.spend(now), Spent::UsedUp(..)), "saving gives nothing back");
        assert!(matches!(meter.spend(at("2026-06-02T00:00:00Z")), Spent::Counted(_)), "a new day begins");
        assert!(matches!(meter.spend(now), Spent::Counted(_)), "a clock set back goes on with the newer day");
    }
}

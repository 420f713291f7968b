//! How long what is stored is kept.

use std::time::Duration;

use serde::Deserialize;

const DAY_SECONDS: u64 = 86_400;

/// How long what is stored is kept; 0 days, or 0 as the most: for ever.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct RetentionConfig {
    /// Age of forecasts that somebody asked for, days.
    pub forecasts_days: u64,
    /// Most of them.
    pub forecasts_most: u64,
    /// Age of fits, days.
    pub fits_days: u64,
    /// Most of them.
    pub fits_most: u64,
    /// Days since the last date of a forecast that a refresh issued.
    pub issued_days: u64,
    /// Age of backtests, days.
    pub backtests_days: u64,
    /// Most of one network.
    pub backtests_most: u64,
    /// Days since a job ended.
    pub jobs_days: u64,
    /// Most records of jobs that have ended.
    pub jobs_most: u64,
    /// Age of idempotency keys up to which their runs stay, hours.
    pub keys_hours: u64,
    /// Time from one sweep to the next, seconds.
    pub every_seconds: u64,
}

impl RetentionConfig {
    /// Time from one sweep to the next.
    pub fn every(&self) -> Duration {
        Duration::from_secs(self.every_seconds)
    }

    /// Age of idempotency keys up to which their runs stay.
    pub fn keys(&self) -> Duration {
        Duration::from_secs(self.keys_hours * 3600)
    }

    /// So many days, none for 0.
    pub fn days(days: u64) -> Option<Duration> {
        (days > 0).then(|| Duration::from_secs(days * DAY_SECONDS))
    }
}

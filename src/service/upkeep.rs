//! What is looked after while the service runs: the rest of the file's check, sizes among the metrics, retention.

use std::time::{Duration, Instant, SystemTime};

use jiff::Timestamp;
use metrics::{counter, gauge};
use tokio::sync::watch;
use tokio::time::sleep;

use super::{Service, ServiceError};
use crate::config::RetentionConfig;
use crate::store::{Checked, RetentionKind, RetentionRules, Store, StoreError};

/// Longest time that the check of a large file takes while the service runs.
const CHECK_LIMIT: Duration = Duration::from_secs(600);
/// Time from one measuring of sizes to the next.
const MEASURE_EVERY: Duration = Duration::from_secs(60);
/// Rows are counted anew after so many times as long as counting took: a thousandth of one core at most.
const COUNT_SHARE: u32 = 1000;
/// How far the clock may stray from the time that has passed before retention by age stops.
const LARGEST_JUMP: Duration = Duration::from_secs(3600);
/// Records of jobs stay for so long at least: whoever waits for one still asks.
const LEAST_JOB_AGE: Duration = Duration::from_secs(3600);

impl Service {
    /// Checks the database file within `limit`; tells whether all of it was looked at.
    pub(super) async fn check_at_start(store: &Store, limit: Duration) -> Result<bool, StoreError> {
        if limit.is_zero() {
            return Ok(false);
        }
        let Some(checked) = store.check_integrity(limit).await? else { return Ok(true) };
        tell(&checked);
        store.check_sound()?;
        Ok(checked.complete)
    }

    /// Looks after the database until `stopped` says so.
    pub async fn keep_up(self, mut stopped: watch::Receiver<bool>) {
        let upkeep = async {
            tokio::join!(self.finish_check(), self.measure(), self.retain_in_turns());
        };
        tokio::select! {
            // A sender that is gone has stopped.
            _ = stopped.wait_for(|&stop| stop) => {}
            () = upkeep => {}
        }
    }

    async fn finish_check(&self) {
        if self.checked_at_start {
            return;
        }
        match self.store.check_integrity(CHECK_LIMIT).await {
            Ok(checked) => checked.iter().for_each(tell),
            Err(error) => tracing::warn!(%error, "the database file could not be checked"),
        }
    }

    async fn measure(&self) {
        let mut count_at = Instant::now();
        loop {
            match self.store.sizes().await {
                Ok(sizes) => {
                    gauge!("tailcast_database_bytes").set(sizes.database_bytes as f64);
                    gauge!("tailcast_database_log_bytes").set(sizes.log_bytes as f64);
                    gauge!("tailcast_database_free_bytes").set(sizes.free_bytes as f64);
                    gauge!("tailcast_spool_bytes").set(sizes.spool_bytes as f64);
                    if let Some(free) = sizes.disk_free_bytes {
                        gauge!("tailcast_disk_free_bytes").set(free as f64);
                    }
                }
                Err(error) => tracing::debug!(%error, "the database's size could not be read"),
            }
            if Instant::now() >= count_at {
                let started = Instant::now();
                match self.store.row_counts().await {
                    Ok(counts) => counts
                        .into_iter()
                        .for_each(|(table, rows)| gauge!("tailcast_database_rows", "table" => table).set(rows as f64)),
                    Err(error) => tracing::debug!(%error, "the database's rows could not be counted"),
                }
                count_at = Instant::now() + started.elapsed() * COUNT_SHARE;
            }
            sleep(MEASURE_EVERY).await;
        }
    }

    async fn retain_in_turns(&self) {
        let clock = Clock::started(SystemTime::now(), Instant::now());
        loop {
            // Not at once: a clock that is wrong at the start is mostly put right by then.
            sleep(self.retention.every()).await;
            let now = SystemTime::now();
            if clock.strayed(now, Instant::now()) > LARGEST_JUMP {
                tracing::warn!(
                    "nothing is removed by retention: the clock was set by more than an hour since the start; restart the service \
                     when it is right"
                );
                continue;
            }
            if let Err(error) = self.retain(Timestamp::try_from(now).unwrap_or(Timestamp::UNIX_EPOCH)).await {
                tracing::warn!(%error, "retention stopped short; the next sweep goes on");
            }
        }
    }

    /// Removes what the settings do not keep as of `now`.
    async fn retain(&self, now: Timestamp) -> Result<(), ServiceError> {
        for (kind, rules) in rules(&self.retention, now) {
            let started = Instant::now();
            let removed = self.store.retain(kind, &rules).await?;
            if removed > 0 {
                counter!("tailcast_retention_removed_total", "kind" => kind.as_str()).increment(removed);
                tracing::info!(
                    kind = kind.as_str(),
                    removed,
                    elapsed_ms = started.elapsed().as_millis(),
                    "removed by retention"
                );
            }
        }
        Ok(())
    }
}

fn rules(keep: &RetentionConfig, now: Timestamp) -> [(RetentionKind, RetentionRules); 5] {
    let before = |age: Duration| now.checked_sub(age).unwrap_or(Timestamp::UNIX_EPOCH);
    let rules = |days: u64, most: u64, untouched: Duration| RetentionRules {
        older_than: RetentionConfig::days(days).map(before),
        most: (most > 0).then_some(most),
        untouched_since: before(untouched),
    };
    [
        (RetentionKind::Forecasts, rules(keep.forecasts_days, keep.forecasts_most, keep.keys())),
        (RetentionKind::Fits, rules(keep.fits_days, keep.fits_most, keep.keys())),
        (RetentionKind::Issued, rules(keep.issued_days, 0, keep.keys())),
        (RetentionKind::Backtests, rules(keep.backtests_days, keep.backtests_most, keep.keys())),
        (RetentionKind::Jobs, rules(keep.jobs_days, keep.jobs_most, LEAST_JOB_AGE)),
    ]
}

fn tell(checked: &Checked) {
    let elapsed_ms = checked.elapsed.as_millis();
    if !checked.faults.is_empty() {
        tracing::error!(faults = checked.faults.join("; "), elapsed_ms, "the database file is damaged");
    } else if checked.complete {
        tracing::info!(elapsed_ms, "the database file is sound: its pages, and references between rows");
    } else {
        tracing::info!(elapsed_ms, "no damage was found in the part of the database file that there was time for");
    }
}

/// The clock on the wall beside one that nobody sets.
#[derive(Debug, Clone, Copy)]
struct Clock {
    wall: SystemTime,
    steady: Instant,
}

impl Clock {
    fn started(wall: SystemTime, steady: Instant) -> Self {
        Self { wall, steady }
    }

    /// How far the clock has been set, forwards or backwards.
    fn strayed(&self, wall: SystemTime, steady: Instant) -> Duration {
        let foretold = self.wall + steady.saturating_duration_since(self.steady);
        wall.duration_since(foretold).unwrap_or_else(|back| back.duration())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_clock_that_is_set_is_noticed() {
        let (wall, steady) = (SystemTime::now(), Instant::now());
        let clock = Clock::started(wall, steady);
        let (hour, later) = (Duration::from_secs(3600), steady + Duration::from_secs(7200));
        assert_eq!(clock.strayed(wall + 2 * hour, later), Duration::ZERO);
        assert_eq!(clock.strayed(wall + 50 * hour, later), 48 * hour);
        assert_eq!(clock.strayed(wall - hour, later), 3 * hour);
    }
}

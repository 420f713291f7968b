//! Runs what is due, several sources at a time; of processes on one database exactly one takes each run.

use std::time::Duration;

use jiff::{Span, Timestamp};
use metrics::counter;
use tokio::sync::watch;
use tokio::task::JoinSet;
use tokio::time::sleep;

use super::schedule;
use crate::model::Snapshot;
use crate::service::jobs::persistently;
use crate::service::{Clash, NetworkName, Service, ServiceError, date_text};
use crate::sources::{Counting, count};
use crate::store::ClaimedRun;

/// Sources that are run at the same time.
const MOST_AT_ONCE: usize = 4;
/// Longest sleep: what is due by the clock is found again after the clock was set.
const LONGEST_SLEEP: Duration = Duration::from_secs(60);
/// The same where other processes may be asked for a run.
const SHARED_SLEEP: Duration = Duration::from_secs(1);
/// Pause when the database fails.
const STORE_PAUSE: Duration = Duration::from_secs(2);
/// Time between two looks whether a run that is at work is still its source's.
const LOOK: Duration = Duration::from_secs(2);
/// How much longer than the query's own time a claim holds, seconds: to connect, to store, and to note how it went.
const CLAIM_MARGIN_SECONDS: u64 = 120;

impl Service {
    /// Runs sources until it is told to stop; runs that are under way then are given up, and are due when the next process starts.
    pub async fn run_sources(self, mut stop: watch::Receiver<bool>) {
        let mut runs = JoinSet::new();
        // Of a file those that the last process was at are this process's.
        let mut released = self.store.is_shared();
        while !*stop.borrow() {
            let pause = match self.start_runs(&mut runs, &mut released).await {
                Ok(pause) => pause,
                // Until somebody runs the migrate command.
                Err(ServiceError::TablesOutdated) => LONGEST_SLEEP,
                Err(error) => {
                    tracing::warn!(%error, "sources that are due cannot be read; it is tried again");
                    STORE_PAUSE
                }
            };
            tokio::select! {
                told = stop.changed() => if told.is_err() { break },
                () = self.sources.wake.notified() => {}
                () = sleep(pause) => {}
                Some(_) = runs.join_next() => {}
            }
        }
        runs.shutdown().await;
        if let Err(error) = self.store.release_runs().await {
            tracing::warn!(%error, "claims on runs of sources could not be given up; others wait until they run out");
        }
    }

    /// Starts what is due, as far as there are places; returns how long nothing else is.
    async fn start_runs(&self, runs: &mut JoinSet<()>, released: &mut bool) -> Result<Duration, ServiceError> {
        if !*released {
            self.store.release_runs().await?;
            *released = true;
        }
        let longest = if self.store.is_shared() { SHARED_SLEEP } else { LONGEST_SLEEP };
        while runs.len() < MOST_AT_ONCE {
            let wait = self.store.next_run_in().await?.map_or(longest, Duration::from_micros);
            if !wait.is_zero() {
                return Ok(wait.min(longest));
            }
            let Some(claimed) = self.store.claim_run(CLAIM_MARGIN_SECONDS).await? else {
                // Another process was faster.
                return Ok(SHARED_SLEEP);
            };
            let service = self.clone();
            runs.spawn(async move { service.run_claimed(claimed).await });
        }
        // One that ends wakes the loop.
        Ok(LONGEST_SLEEP)
    }

    async fn run_claimed(&self, claimed: ClaimedRun) {
        let outcome = self.snapshot_by(&claimed).await;
        let (network, database) = (&claimed.network, &claimed.source.source.database);
        let ended = match &outcome {
            Ok(None) => {
                tracing::info!(%network, "a run's source was deleted or replaced meanwhile; its answer is dropped");
                return;
            }
            Ok(Some(as_of)) => {
                tracing::info!(%network, %database, snapshot = %date_text(*as_of), "a source was run");
                Ok(*as_of)
            }
            Err(why) => {
                tracing::warn!(%network, %database, "a source's run failed: {why}");
                Err(why.as_str())
            }
        };
        let label = if ended.is_ok() { "succeeded" } else { "failed" };
        counter!("tailcast_source_runs_total", "outcome" => label).increment(1);
        let now = Timestamp::now();
        // Its time has come by the database's clock; this machine's may be behind that.
        let due_at = self.due_after(&claimed, ended.is_ok(), now.max(claimed.source.due_at));
        if let Err(error) = persistently(|| self.store.end_run(&claimed, now, ended, due_at)).await {
            tracing::error!(%error, %network, "how a source's run went could not be noted; it is run again");
        }
    }

    /// When the next run is due: after one that failed, when its pause is over; else at the schedule's next time.
    fn due_after(&self, claimed: &ClaimedRun, succeeded: bool, now: Timestamp) -> Timestamp {
        let source = &claimed.source;
        if !succeeded {
            let pause = self.sources.config.pause(source.failures.saturating_add(1));
            return now.checked_add(pause).unwrap_or(Timestamp::MAX);
        }
        match source.source.every.parse::<Span>() {
            Ok(every) => schedule::next(source.source.starts_at, every, now),
            // It was read before it was stored.
            Err(_) => Timestamp::MAX,
        }
    }

    /// Runs the query and stores what it answers: the snapshot's date, none when the run is not its source's any more; otherwise why not.
    async fn snapshot_by(&self, claimed: &ClaimedRun) -> Result<Option<Timestamp>, String> {
        let source = &claimed.source.source;
        let Some(database) = self.sources.config.database(&source.database) else {
            let refusal = self.sources.refusal(&source.database);
            return Err(refusal.map_or_else(String::new, |refusal| refusal.to_string()));
        };
        let name = NetworkName::new(&claimed.network).map_err(|fault| fault.to_string())?;
        let counting = Counting {
            query: &source.query,
            time: Duration::from_secs(source.timeout_seconds),
            most_rows: self.sources.most_rows,
        };
        let snapshot = tokio::select! {
            counted = count(database, counting) => counted.map_err(|fault| fault.to_string())?,
            // Its place is another's: a source that is put again and again would hold them all.
            () = self.until_replaced(claimed) => return Ok(None),
        };
        self.store_counted(claimed, name, snapshot).await.map_err(|error| in_words(&error))
    }

    /// Returns when a run is no longer its source's.
    async fn until_replaced(&self, claimed: &ClaimedRun) {
        loop {
            sleep(LOOK).await;
            // Whoever cannot tell goes on; it is asked again before anything is stored.
            if matches!(self.store.run_stands(&claimed.network, claimed.run).await, Ok(false)) {
                return;
            }
        }
    }

    async fn store_counted(
        &self,
        claimed: &ClaimedRun,
        name: NetworkName,
        snapshot: Snapshot,
    ) -> Result<Option<Timestamp>, ServiceError> {
        if !self.store.run_stands(&claimed.network, claimed.run).await? {
            return Ok(None);
        }
        let as_of = snapshot.as_of;
        self.put_snapshot(name, snapshot, |_| true).await?;
        Ok(Some(as_of))
    }
}

/// Why a snapshot could not be stored.
fn in_words(error: &ServiceError) -> String {
    match error {
        ServiceError::Clash(Clash::TooMany { most, .. }) => {
            format!(
                "the network has {most} snapshots, the most that one may have; delete some, or run the source less often"
            )
        }
        ServiceError::Clash(Clash::TooManyRows { most, .. }) => {
            format!(
                "the network's evidence would have more than {most} rows; delete old snapshots, or run the source less often"
            )
        }
        ServiceError::Clash(_) => {
            "its snapshot does not fit the network's stored transitions, which have other counts at its date".into()
        }
        ServiceError::StoreBusy(_) | ServiceError::StoreUnavailable(_) | ServiceError::TablesOutdated => {
            format!("its snapshot could not be stored: {error}")
        }
        _ => {
            tracing::error!(%error, "a source's snapshot could not be stored");
            "its snapshot could not be stored; the log has the cause".to_owned()
        }
    }
}

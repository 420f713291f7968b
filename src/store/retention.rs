//! Removing what is older, or more, than is to be kept: in small transactions, oldest first.

use std::time::Duration;

use jiff::Timestamp;
use sqlx::FromRow;
use tokio::time::sleep;

use super::columns::date_key;
use super::statement::{query, query_scalar};
use super::writes::Scope;
use super::{Store, StoreError};

/// Rows removed in one transaction: whoever else writes waits for one of them at most.
const AT_ONCE: usize = 50;
/// Rows looked at in one go.
const PAGE: i64 = 500;
/// Pause between two transactions, in which others write.
const PAUSE: Duration = Duration::from_millis(5);
/// An id below all others.
const NO_ID: &str = "";

/// What is removed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RetentionKind {
    /// Forecasts that somebody asked for.
    Forecasts,
    /// Fits.
    Fits,
    /// Forecasts that refreshes issued, by the last of their dates, with their accounts.
    Issued,
    /// Backtests; the most are those of one network, whose newest stays.
    Backtests,
    /// Records of jobs that have ended.
    Jobs,
}

impl RetentionKind {
    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Forecasts => "forecasts",
            Self::Fits => "fits",
            Self::Issued => "issued",
            Self::Backtests => "backtests",
            Self::Jobs => "jobs",
        }
    }
}

/// What is kept of a kind.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct RetentionRules {
    /// What is older goes; none: nothing is too old.
    pub older_than: Option<Timestamp>,
    /// The newest so many stay; none: nothing is too much.
    pub most: Option<u64>,
    /// Runs with an idempotency key that are younger stay; so do records of jobs that ended later.
    pub untouched_since: Timestamp,
}

/// A run that nothing protects.
#[derive(FromRow)]
struct Candidate {
    id: String,
    created_at: i64,
}

impl Store {
    /// Removes what the rules do not keep; tells how much. Never removed, whatever the rules: the latest forecast of a network, an
    /// issued forecast of a network one of whose dates is still to come, a network's newest backtest, a job that has not ended or
    /// that says how a network's forecast stands, a run whose idempotency key is younger than stated.
    ///
    /// # Errors
    /// When the database fails; what was removed before stays removed.
    pub async fn retain(&self, kind: RetentionKind, rules: &RetentionRules) -> Result<u64, StoreError> {
        if rules.older_than.is_none() && rules.most.is_none() {
            return Ok(0);
        }
        match kind {
            RetentionKind::Forecasts => self.retain_runs("forecast", rules).await,
            RetentionKind::Fits => self.retain_runs("fit", rules).await,
            RetentionKind::Issued => self.retain_issued(rules).await,
            RetentionKind::Backtests => self.retain_backtests(rules).await,
            RetentionKind::Jobs => self.retain_jobs(rules).await,
        }
    }

    async fn retain_runs(&self, kind: &str, rules: &RetentionRules) -> Result<u64, StoreError> {
        let surplus: Option<String> = match rules.most {
            None => None,
            Some(most) => query_scalar(
                "SELECT id FROM runs WHERE kind = $1 AND NOT EXISTS (SELECT 1 FROM network_runs WHERE run_id = id AND \
                     network_runs.network IS NOT NULL AND issued_to IS NOT NULL) ORDER BY id DESC LIMIT 1 OFFSET $2",
            )
            .bind(kind)
            .bind(offset(most))
            .fetch_optional(&mut self.reader().await?)
            .await?,
        };
        let cutoff = micros(rules.older_than);
        let (mut after, mut removed) = (NO_ID.to_owned(), 0);
        loop {
            let page: Vec<Candidate> = query(
                "SELECT id, created_at FROM runs WHERE kind = $1 AND id > $2 \
                 AND NOT EXISTS (SELECT 1 FROM latest_forecasts WHERE run_id = id) \
                 AND NOT EXISTS (SELECT 1 FROM network_runs WHERE run_id = id AND network_runs.network IS NOT NULL AND \
                 issued_to IS NOT NULL) \
                 AND (created_at < $3 OR NOT EXISTS (SELECT 1 FROM idempotency_keys WHERE run_id = id)) \
                 ORDER BY id LIMIT $4",
            )
            .bind(kind)
            .bind(after.as_str())
            .bind(rules.untouched_since.as_microsecond())
            .bind(PAGE)
            .fetch_all(&mut self.reader().await?)
            .await?;
            let Some(last) = page.last() else { return Ok(removed) };
            after.clone_from(&last.id);
            let is_surplus = |id: &String| surplus.as_ref().is_some_and(|surplus| id <= surplus);
            let gone: Vec<String> = page
                .into_iter()
                .filter(|run| run.created_at < cutoff || is_surplus(&run.id))
                .map(|run| run.id)
                .collect();
            // Ids grow with time: what follows is younger still.
            if gone.is_empty() {
                return Ok(removed);
            }
            removed += self.remove("DELETE FROM runs WHERE id = $1", &gone).await?;
        }
    }

    async fn retain_issued(&self, rules: &RetentionRules) -> Result<u64, StoreError> {
        let Some(cutoff) = rules.older_than else { return Ok(0) };
        let gone: Vec<String> = query_scalar(
            "SELECT run_id FROM network_runs WHERE network IS NOT NULL AND issued_to IS NOT NULL AND issued_to < $1 \
             AND NOT EXISTS (SELECT 1 FROM latest_forecasts WHERE latest_forecasts.run_id = network_runs.run_id) ORDER BY run_id",
        )
        .bind(date_key(cutoff))
        .fetch_all(&mut self.reader().await?)
        .await?;
        self.remove("DELETE FROM runs WHERE id = $1", &gone).await
    }

    async fn retain_backtests(&self, rules: &RetentionRules) -> Result<u64, StoreError> {
        let gone: Vec<String> = query_scalar(
            "SELECT id FROM backtests WHERE (created_at < $1 \
             AND EXISTS (SELECT 1 FROM backtests AS newer WHERE newer.network = backtests.network AND newer.id > backtests.id)) \
             OR (SELECT newer.id FROM backtests AS newer WHERE newer.network = backtests.network AND newer.id > backtests.id \
             ORDER BY newer.id LIMIT 1 OFFSET $2) IS NOT NULL ORDER BY id",
        )
        .bind(micros(rules.older_than))
        .bind(rules.most.map_or(i64::MAX, |most| offset(most.saturating_sub(1))))
        .fetch_all(&mut self.reader().await?)
        .await?;
        self.remove("DELETE FROM backtests WHERE id = $1", &gone).await
    }

    async fn retain_jobs(&self, rules: &RetentionRules) -> Result<u64, StoreError> {
        let surplus: Option<String> =
            match rules.most {
                None => None,
                Some(most) => query_scalar(
                    "SELECT id FROM jobs WHERE state NOT IN ('waiting', 'running') ORDER BY id DESC LIMIT 1 OFFSET $1",
                )
                .bind(offset(most))
                .fetch_optional(&mut self.reader().await?)
                .await?,
            };
        let gone: Vec<String> = query_scalar(
            "SELECT id FROM jobs WHERE state NOT IN ('waiting', 'running') AND ended_at < $1 AND (ended_at < $2 OR id <= $3) \
             AND id NOT IN (SELECT refresh_job FROM networks WHERE refresh_job IS NOT NULL) ORDER BY id",
        )
        .bind(rules.untouched_since.as_microsecond())
        .bind(micros(rules.older_than))
        .bind(surplus.as_deref().unwrap_or(NO_ID))
        .fetch_all(&mut self.reader().await?)
        .await?;
        self.remove("DELETE FROM jobs WHERE id = $1", &gone).await
    }

    /// Removes rows by their ids, a few in each transaction.
    async fn remove(&self, text: &'static str, ids: &[String]) -> Result<u64, StoreError> {
        let mut removed = 0;
        for some in ids.chunks(AT_ONCE) {
            let mut transaction = self.begin(Scope::Own).await?;
            for id in some {
                removed += query(text).bind(id.as_str()).execute(&mut transaction).await?;
            }
            self.commit(transaction).await?;
            sleep(PAUSE).await;
        }
        Ok(removed)
    }
}

/// Before all times when nothing is too old.
fn micros(time: Option<Timestamp>) -> i64 {
    time.map_or(0, Timestamp::as_microsecond)
}

fn offset(count: u64) -> i64 {
    i64::try_from(count).unwrap_or(i64::MAX)
}

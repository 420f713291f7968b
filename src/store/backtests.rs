//! Backtests: the finished ones, and the records of those at work, one an origin.

use jiff::Timestamp;
use sha2::{Digest, Sha256};
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{signed, time, unsigned, uuid};
use super::ids::next_id;
use super::jobs::{JobKind, JobState, end, insert, live_job};
use super::statement::{Connection, query, query_scalar};
use super::writes::Scope;
use super::{Store, StoreError};

/// A backtest to keep, and the end of its job.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewBacktest {
    /// Its id, which is its job's.
    pub id: Uuid,
    /// The network.
    pub network: String,
    /// When it was made.
    pub created_at: Timestamp,
    /// Revision of the network when its evidence was read.
    pub revision: u64,
    /// SHA-256 of that evidence.
    pub evidence: String,
    /// What was asked, JSON.
    pub task: String,
    /// SHA-256 of the document.
    pub tag: String,
    /// The document, JSON.
    pub document: String,
}

/// A backtest as kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredBacktest {
    /// Its line.
    pub summary: BacktestSummary,
    /// SHA-256 of the document.
    pub tag: String,
    /// The document, JSON.
    pub document: String,
}

/// A backtest's line in a list.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct BacktestSummary {
    /// Its id.
    pub id: Uuid,
    /// The network.
    pub network: String,
    /// When it was made.
    pub created_at: Timestamp,
    /// What was asked, JSON.
    pub task: String,
    /// Whether what is stored of the network is no longer what it stands on.
    pub outdated: bool,
    /// When counts it stands on were last replaced or deleted.
    pub evidence_corrected_at: Option<Timestamp>,
}

/// What came of a write for a backtest.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum BacktestWrite {
    /// It is stored.
    Stored,
    /// Its job has ended; nothing was changed.
    CalledOff,
    /// What is stored of the network changed meanwhile; nothing was changed.
    Superseded,
}

#[derive(FromRow)]
struct SummaryRow {
    id: String,
    network: String,
    created_at: i64,
    evidence: String,
    evidence_corrected_at: Option<i64>,
    task: String,
}

#[derive(FromRow)]
struct BacktestRow {
    #[sqlx(flatten)]
    summary: SummaryRow,
    tag: String,
    document: String,
}

impl Store {
    /// Keeps what a backtest at work has of an origin. `evidence` is the digest of what it stands on; with `only_current`,
    /// only where that is what is stored now.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn put_backtest_record(
        &self,
        job: Uuid,
        (origin, record): (u64, &str),
        evidence: &str,
        only_current: bool,
    ) -> Result<BacktestWrite, StoreError> {
        let mut transaction = self.begin(Scope::OfJob(job)).await?;
        let network: Option<String> =
            query_scalar("SELECT network FROM jobs WHERE id = $1 AND state IN ('waiting', 'running')")
                .bind(job.to_string())
                .fetch_optional(&mut transaction)
                .await?;
        let Some(network) = network else { return Ok(BacktestWrite::CalledOff) };
        if only_current && digest(&mut transaction, &network).await? != evidence {
            return Ok(BacktestWrite::Superseded);
        }
        query(
            "INSERT INTO backtest_records (job, origin, evidence, record) VALUES ($1, $2, $3, $4) \
             ON CONFLICT (job, origin) DO UPDATE SET evidence = excluded.evidence, record = excluded.record",
        )
        .bind(job.to_string())
        .bind(signed("origin", origin)?)
        .bind(evidence)
        .bind(record)
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await?;
        Ok(BacktestWrite::Stored)
    }

    /// Origins that a backtest at work has records of, with the digest of the evidence they stand on.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_backtest_origins(&self, job: Uuid) -> Result<Vec<(u64, String)>, StoreError> {
        let rows: Vec<(i64, String)> =
            query("SELECT origin, evidence FROM backtest_records WHERE job = $1 ORDER BY origin")
                .bind(job.to_string())
                .fetch_all(&mut self.reader().await?)
                .await?;
        rows.into_iter().map(|(origin, evidence)| Ok((unsigned("origin", origin)?, evidence))).collect()
    }

    /// The records of a backtest at work that stand on `evidence`, in the order of their origins.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_backtest_records(&self, job: Uuid, evidence: &str) -> Result<Vec<String>, StoreError> {
        let records =
            query_scalar("SELECT record FROM backtest_records WHERE job = $1 AND evidence = $2 ORDER BY origin")
                .bind(job.to_string())
                .bind(evidence)
                .fetch_all(&mut self.reader().await?)
                .await?;
        Ok(records)
    }

    /// Keeps a backtest, ends its job and drops its records, in one transaction; with `only_current`, only where it stands on
    /// what is stored now.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn finish_backtest(
        &self,
        made: &NewBacktest,
        outcome: &str,
        only_current: bool,
    ) -> Result<BacktestWrite, StoreError> {
        let mut transaction = self.begin(Scope::OfJob(made.id)).await?;
        if only_current && digest(&mut transaction, &made.network).await? != made.evidence {
            return Ok(BacktestWrite::Superseded);
        }
        // A job that was called off, by itself or with its network, must not leave anything.
        if !end(&mut transaction, made.id, JobState::Succeeded, Some(outcome)).await? {
            return Ok(BacktestWrite::CalledOff);
        }
        query(
            "INSERT INTO backtests (id, network, created_at, revision, evidence, task, tag, document) \
             VALUES ($1, $2, $3, $4, $5, $6, $7, $8)",
        )
        .bind(made.id.to_string())
        .bind(made.network.as_str())
        .bind(made.created_at.as_microsecond())
        .bind(signed("revision", made.revision)?)
        .bind(made.evidence.as_str())
        .bind(made.task.as_str())
        .bind(made.tag.as_str())
        .bind(made.document.as_str())
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await?;
        Ok(BacktestWrite::Stored)
    }

    /// The backtest with this id, if there is one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_backtest(&self, id: Uuid) -> Result<Option<StoredBacktest>, StoreError> {
        let mut transaction = self.begin_read().await?;
        let row: Option<BacktestRow> = query(
            "SELECT id, network, created_at, evidence, evidence_corrected_at, task, tag, document FROM backtests \
             WHERE id = $1",
        )
        .bind(id.to_string())
        .fetch_optional(&mut transaction)
        .await?;
        let Some(BacktestRow { summary, tag, document }) = row else { return Ok(None) };
        let current = digest(&mut transaction, &summary.network).await?;
        Ok(Some(StoredBacktest { summary: summary.against(&current)?, tag, document }))
    }

    /// Backtests of a network older than `before`, newest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_backtests(
        &self,
        network: &str,
        before: Option<Uuid>,
        limit: u32,
    ) -> Result<Vec<BacktestSummary>, StoreError> {
        let mut transaction = self.begin_read().await?;
        let rows: Vec<SummaryRow> = query(
            "SELECT id, network, created_at, evidence, evidence_corrected_at, task FROM backtests \
             WHERE network = $1 AND ($2 IS NULL OR id < $2) ORDER BY id DESC LIMIT $3",
        )
        .bind(network)
        .bind(before.map(|id| id.to_string()))
        .bind(i64::from(limit))
        .fetch_all(&mut transaction)
        .await?;
        let current = digest(&mut transaction, network).await?;
        rows.into_iter().map(|row| row.against(&current)).collect()
    }

    /// Deletes a backtest that `allows`, asked about its validator; false when there is none, none when `allows` refuses.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn delete_backtest(
        &self,
        id: Uuid,
        allows: impl FnOnce(&str) -> bool,
    ) -> Result<Option<bool>, StoreError> {
        let mut transaction = self.begin(Scope::OfBacktest(id)).await?;
        let tag: Option<String> = query_scalar("SELECT tag FROM backtests WHERE id = $1")
            .bind(id.to_string())
            .fetch_optional(&mut transaction)
            .await?;
        let Some(tag) = tag else { return Ok(Some(false)) };
        if !allows(&tag) {
            return Ok(None);
        }
        query("DELETE FROM backtests WHERE id = $1").bind(id.to_string()).execute(&mut transaction).await?;
        self.commit(transaction).await?;
        Ok(Some(true))
    }
}

/// SHA-256 of all evidence that is stored of a network: the same for the same evidence, whatever its plan.
pub(super) async fn digest(connection: &mut Connection, network: &str) -> Result<String, StoreError> {
    let parts: Vec<String> = query_scalar(
        "SELECT part FROM (SELECT 1 AS place, degree_kind || ' ' || coalesce(entry_degrees, '') AS part FROM networks \
         WHERE name = $1 UNION ALL SELECT 2, as_of || ' ' || tag FROM snapshots WHERE network = $1 \
         UNION ALL SELECT 3, starts_at || ' ' || ends_at || ' ' || tag FROM transitions WHERE network = $1 \
         UNION ALL SELECT 4, tag FROM link_events WHERE network = $1) AS parts ORDER BY place, part",
    )
    .bind(network)
    .fetch_all(connection)
    .await?;
    Ok(Sha256::digest(parts.join("\n").as_bytes()).iter().map(|byte| format!("{byte:02x}")).collect())
}

/// Drops the records of a job.
pub(super) async fn drop_records(connection: &mut Connection, job: Uuid) -> Result<(), StoreError> {
    query("DELETE FROM backtest_records WHERE job = $1").bind(job.to_string()).execute(connection).await?;
    Ok(())
}

/// Marks the backtests of a network that stand on counts of `revision`, which are replaced now.
pub(super) async fn corrected(connection: &mut Connection, network: &str, revision: u64) -> Result<(), StoreError> {
    query("UPDATE backtests SET evidence_corrected_at = $3, redo_due = TRUE WHERE network = $1 AND revision >= $2")
        .bind(network)
        .bind(signed("revision", revision)?)
        .bind(Timestamp::now().as_microsecond())
        .execute(connection)
        .await?;
    Ok(())
}

/// Takes the newest backtest of a network on anew where counts it stands on were replaced; not while one is at work, which
/// sees the change itself.
pub(super) async fn redo(connection: &mut Connection, network: &str) -> Result<Option<Uuid>, StoreError> {
    let newest: Option<(String, bool, String)> =
        query("SELECT id, redo_due, task FROM backtests WHERE network = $1 ORDER BY id DESC LIMIT 1")
            .bind(network)
            .fetch_optional(&mut *connection)
            .await?;
    let Some((newest, true, task)) = newest else { return Ok(None) };
    if live_job(connection, network, JobKind::Backtest).await?.is_some() {
        return Ok(None);
    }
    let id = next_id();
    insert(connection, id, JobKind::Backtest, network, &task).await?;
    // Once a correction: a redo that fails or is called off is not taken on at every change that follows.
    query("UPDATE backtests SET redo_due = FALSE WHERE id = $1").bind(newest).execute(connection).await?;
    Ok(Some(id))
}

impl SummaryRow {
    fn against(self, current: &str) -> Result<BacktestSummary, StoreError> {
        Ok(BacktestSummary {
            id: uuid(&self.id)?,
            network: self.network,
            created_at: time(self.created_at)?,
            task: self.task,
            outdated: self.evidence != current,
            evidence_corrected_at: self.evidence_corrected_at.map(time).transpose()?,
        })
    }
}

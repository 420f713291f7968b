//! Sources: what is asked for, when the next run is due, whose it is, and how runs fare.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, date_key, signed, time, unsigned, uuid};
use super::ids::next_id;
use super::statement::{Connection, query, query_scalar};
use super::writes::{Scope, WriteError, network_exists};
use super::{Store, StoreError};

/// A source to keep.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewSource {
    /// SHA-256 of what was asked for.
    pub tag: String,
    /// Name of the database.
    pub database: String,
    /// The query.
    pub query: String,
    /// Time from one run to the next, ISO 8601.
    pub every: String,
    /// Longest time that a run's query may take, seconds.
    pub timeout_seconds: u64,
    /// What due times are counted from.
    pub starts_at: Timestamp,
    /// When it is stored.
    pub updated_at: Timestamp,
}

/// A source as it is kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredSource {
    /// As it was stored.
    pub source: NewSource,
    /// When the next run is due; of one that is at work, when it was.
    pub due_at: Timestamp,
    /// The run at work.
    pub run: Option<Uuid>,
    /// Runs that have ended.
    pub ended: u64,
    /// Runs that failed since the last that did not.
    pub failures: u64,
    /// When the last run that stored a snapshot ended, and the snapshot's date.
    pub succeeded: Option<(Timestamp, Timestamp)>,
    /// When the last run that failed ended, and why.
    pub failed: Option<(Timestamp, String)>,
}

/// A run that this process has claimed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ClaimedRun {
    /// Its id.
    pub run: Uuid,
    /// The network.
    pub network: String,
    /// The source.
    pub source: StoredSource,
}

/// What came of a run: the date of its snapshot, or why there is none.
pub type RunEnd<'a> = Result<Timestamp, &'a str>;

#[derive(FromRow)]
struct SourceRow {
    updated_at: i64,
    tag: String,
    database_name: String,
    query: String,
    every: String,
    timeout_seconds: i64,
    starts_at: i64,
    due_at: i64,
    run: Option<String>,
    ended: i64,
    failures: i64,
    succeeded_at: Option<i64>,
    snapshot: Option<String>,
    failed_at: Option<i64>,
    failure: Option<String>,
}

impl Store {
    /// Keeps a network's source, whose first run is due at `due_at`, in place of the one it has; true when it had none. One that stands
    /// there as it is keeps its schedule. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, or the database fails.
    pub async fn put_source(
        &self,
        network: &str,
        source: &NewSource,
        due_at: Timestamp,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<bool, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored = tag(&mut transaction, network).await?;
        if !allows(stored.as_deref()) {
            return Err(WriteError::Mismatch);
        }
        if stored.as_deref() != Some(source.tag.as_str()) {
            // What was known of the one before is of no use, and a run of it that is at work is no longer the source's.
            query("DELETE FROM sources WHERE network = $1").bind(network).execute(&mut transaction).await?;
            insert(&mut transaction, network, source, due_at).await?;
        }
        self.commit(transaction).await?;
        Ok(stored.is_none())
    }

    /// A network's source, if it has one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_source(&self, network: &str) -> Result<Option<StoredSource>, StoreError> {
        let mut connection = self.reader().await?;
        let row = find(&mut connection, network).await?;
        row.map(StoredSource::try_from).transpose()
    }

    /// Deletes a network's source; its snapshots stay. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network, it has no source, `allows` refuses, or the database fails.
    pub async fn delete_source(
        &self,
        network: &str,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<(), WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored = tag(&mut transaction, network).await?;
        if !allows(Some(&stored.ok_or(WriteError::Missing)?)) {
            return Err(WriteError::Mismatch);
        }
        query("DELETE FROM sources WHERE network = $1").bind(network).execute(&mut transaction).await?;
        Ok(self.commit(transaction).await?)
    }

    /// Makes the next run of a network's source due now; one that is at work stays the one.
    ///
    /// # Errors
    /// When there is no such network, it has no source, or the database fails.
    pub async fn source_due_now(&self, network: &str) -> Result<(), WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let now = transaction.now().await?;
        let found =
            query("UPDATE sources SET due_at = CASE WHEN due_at > $2 THEN $2 ELSE due_at END WHERE network = $1")
                .bind(network)
                .bind(now)
                .execute(&mut transaction)
                .await?;
        if found == 0 {
            return Err(WriteError::Missing);
        }
        Ok(self.commit(transaction).await?)
    }

    /// Claims the run that is due longest, if there is one that nobody is at: no other process begins it before `margin_seconds` after
    /// its query's own time are over.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn claim_run(&self, margin_seconds: u64) -> Result<Option<ClaimedRun>, StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        let now = transaction.now().await?;
        let skip = transaction.skip_locked();
        let due: Option<(String, i64)> = query(
            "SELECT network, timeout_seconds FROM sources WHERE due_at <= $1 AND (claimed_until IS NULL OR claimed_until < $1) \
             ORDER BY due_at, network LIMIT 1",
        )
        .bind(now)
        .push(skip)
        .fetch_optional(&mut transaction)
        .await?;
        // Nothing is written, so nothing is committed.
        let Some((network, timeout)) = due else { return Ok(None) };
        let run = next_id();
        let seconds = timeout.saturating_add(signed("margin", margin_seconds)?);
        query("UPDATE sources SET run = $2, claimed_by = $3, claimed_until = $4 WHERE network = $1")
            .bind(network.as_str())
            .bind(run.to_string())
            .bind(self.process.to_string())
            .bind(now.saturating_add(seconds.saturating_mul(1_000_000)))
            .execute(&mut transaction)
            .await?;
        let found = find(&mut transaction, &network).await?;
        self.commit(transaction).await?;
        found.map(|row| Ok(ClaimedRun { run, network, source: row.try_into()? })).transpose()
    }

    /// How long until the next run is due that nobody is at, microseconds; none when there is no such run.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn next_run_in(&self) -> Result<Option<u64>, StoreError> {
        let mut connection = self.reader().await?;
        let now = connection.now().await?;
        let due: Option<i64> = query_scalar(
            "SELECT min(CASE WHEN claimed_until IS NULL OR claimed_until < due_at THEN due_at ELSE claimed_until END) FROM sources",
        )
        .fetch_one(&mut connection)
        .await?;
        Ok(due.map(|due| u64::try_from(due.saturating_sub(now)).unwrap_or(0)))
    }

    /// Whether a run is still its source's: the source was neither deleted nor replaced, and no other process began anew.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn run_stands(&self, network: &str, run: Uuid) -> Result<bool, StoreError> {
        let found: Option<i32> = query_scalar("SELECT 1 FROM sources WHERE network = $1 AND run = $2")
            .bind(network)
            .bind(run.to_string())
            .fetch_optional(&mut self.reader().await?)
            .await?;
        Ok(found.is_some())
    }

    /// Ends a run, and notes when the next is due; nothing is noted of one that is no longer its source's.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn end_run(
        &self,
        claimed: &ClaimedRun,
        at: Timestamp,
        end: RunEnd<'_>,
        due_at: Timestamp,
    ) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        query("UPDATE sources SET ended = ended + 1, due_at = $3 WHERE network = $1 AND run = $2")
            .bind(claimed.network.as_str())
            .bind(claimed.run.to_string())
            .bind(due_at.as_microsecond())
            .execute(&mut transaction)
            .await?;
        let noted = match end {
            Ok(snapshot) => query(
                "UPDATE sources SET run = NULL, claimed_by = NULL, claimed_until = NULL, failures = 0, succeeded_at = $3, \
                 snapshot = $4 WHERE network = $1 AND run = $2",
            )
            .bind(claimed.network.as_str())
            .bind(claimed.run.to_string())
            .bind(at.as_microsecond())
            .bind(date_key(snapshot)),
            Err(why) => query(
                "UPDATE sources SET run = NULL, claimed_by = NULL, claimed_until = NULL, failures = failures + 1, \
                 failed_at = $3, failure = $4 WHERE network = $1 AND run = $2",
            )
            .bind(claimed.network.as_str())
            .bind(claimed.run.to_string())
            .bind(at.as_microsecond())
            .bind(why),
        };
        noted.execute(&mut transaction).await?;
        self.commit(transaction).await
    }

    /// Gives up claims on runs: those of this process, or, of a file, those that the process before has left. They are still due.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn release_runs(&self) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        query(
            "UPDATE sources SET run = NULL, claimed_by = NULL, claimed_until = NULL WHERE run IS NOT NULL \
             AND (claimed_by = $1 OR $2)",
        )
        .bind(self.process.to_string())
        .bind(!self.is_shared())
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await
    }
}

async fn tag(connection: &mut Connection, network: &str) -> Result<Option<String>, StoreError> {
    let found = query_scalar("SELECT tag FROM sources WHERE network = $1").bind(network);
    Ok(found.fetch_optional(connection).await?)
}

async fn find(connection: &mut Connection, network: &str) -> Result<Option<SourceRow>, StoreError> {
    let found = query(
        "SELECT updated_at, tag, database_name, query, every, timeout_seconds, starts_at, due_at, run, ended, failures, \
         succeeded_at, snapshot, failed_at, failure FROM sources WHERE network = $1",
    )
    .bind(network);
    Ok(found.fetch_optional(connection).await?)
}

async fn insert(
    connection: &mut Connection,
    network: &str,
    source: &NewSource,
    due_at: Timestamp,
) -> Result<(), StoreError> {
    query(
        "INSERT INTO sources (network, created_at, updated_at, tag, database_name, query, every, timeout_seconds, starts_at, due_at) \
         VALUES ($1, $2, $2, $3, $4, $5, $6, $7, $8, $9)",
    )
    .bind(network)
    .bind(source.updated_at.as_microsecond())
    .bind(source.tag.as_str())
    .bind(source.database.as_str())
    .bind(source.query.as_str())
    .bind(source.every.as_str())
    .bind(signed("timeout_seconds", source.timeout_seconds)?)
    .bind(source.starts_at.as_microsecond())
    .bind(due_at.as_microsecond())
    .execute(connection)
    .await?;
    Ok(())
}

impl TryFrom<SourceRow> for StoredSource {
    type Error = StoreError;

    fn try_from(row: SourceRow) -> Result<Self, StoreError> {
        let succeeded = row.succeeded_at.zip(row.snapshot);
        let failed = row.failed_at.zip(row.failure);
        Ok(Self {
            source: NewSource {
                tag: row.tag,
                database: row.database_name,
                query: row.query,
                every: row.every,
                timeout_seconds: unsigned("timeout_seconds", row.timeout_seconds)?,
                starts_at: time(row.starts_at)?,
                updated_at: time(row.updated_at)?,
            },
            due_at: time(row.due_at)?,
            run: row.run.as_deref().map(uuid).transpose()?,
            ended: unsigned("ended", row.ended)?,
            failures: unsigned("failures", row.failures)?,
            succeeded: succeeded
                .map(|(at, snapshot)| Ok::<_, StoreError>((time(at)?, date(&snapshot)?)))
                .transpose()?,
            failed: failed.map(|(at, why)| Ok::<_, StoreError>((time(at)?, why))).transpose()?,
        })
    }
}

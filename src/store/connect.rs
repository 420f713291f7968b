//! The one way to a database, for the service and for tests alike.

use std::str::FromStr;
use std::sync::Arc;
use std::time::Duration;

use sqlx::Connection;
use sqlx::migrate::Migrator;
use sqlx::sqlite::{SqliteConnectOptions, SqliteJournalMode, SqlitePoolOptions, SqliteSynchronous};
use tokio::sync::watch;
use tokio::time::timeout;

use super::file::DatabaseFile;
use super::{Store, StoreError};
use crate::config::DatabaseConfig;

static MIGRATOR: Migrator = sqlx::migrate!("./migrations");

/// Longest wait for a free connection.
const ACQUIRE_TIMEOUT: Duration = Duration::from_secs(10);
/// Longest wait of a trial write: a probe that waits for a lock is no use as a probe.
const TRIAL_TIMEOUT: Duration = Duration::from_secs(1);

impl Store {
    /// Opens the database, creating the file when it is missing; the tables are left as they are.
    ///
    /// # Errors
    /// When the address is not SQLite's, or the file cannot be opened.
    pub async fn connect(config: &DatabaseConfig) -> Result<Self, StoreError> {
        let address_fault = |reason: String| StoreError::Address { url: config.url.clone(), reason };
        if !config.url.starts_with("sqlite:") || config.url.contains(":memory:") {
            return Err(address_fault("it must name a file, as in sqlite://tailcast.db".into()));
        }
        let options = SqliteConnectOptions::from_str(&config.url)
            .map_err(|error| address_fault(error.to_string()))?
            .busy_timeout(Duration::from_millis(config.busy_timeout_ms))
            .foreign_keys(true)
            .synchronous(SqliteSynchronous::Full);
        let path = options.get_filename().to_owned();
        if let Some(folder) = path.parent().filter(|folder| !folder.as_os_str().is_empty() && !folder.is_dir()) {
            return Err(address_fault(format!("the folder {} does not exist; make it first", folder.display())));
        }
        let writing = options.clone().create_if_missing(true).journal_mode(SqliteJournalMode::Wal);
        let write = pool(1).connect_with(writing).await.map_err(|error| address_fault(error.to_string()))?;
        // Opened after the writer, which creates the file and its write-ahead log.
        let read = pool(config.readers).connect_with(options.create_if_missing(false).read_only(true)).await?;
        Ok(Self { write, read, file: DatabaseFile::at(&path)?, commits: Arc::new(watch::Sender::new(0)) })
    }

    /// Brings the tables up to date.
    ///
    /// # Errors
    /// When a migration fails, or the database was written by a newer version.
    pub async fn migrate(&self) -> Result<(), StoreError> {
        Ok(MIGRATOR.run(&self.write).await?)
    }

    /// Whether the database answers and its tables are those of this version.
    ///
    /// # Errors
    /// When it does not answer, or its file is gone.
    pub async fn is_current(&self) -> Result<bool, StoreError> {
        self.file.check()?;
        match self.table_version().await {
            Ok(version) => Ok(version == MIGRATOR.iter().map(|migration| migration.version).max()),
            Err(StoreError::NoTable(_)) => Ok(false),
            Err(error) => Err(error),
        }
    }

    async fn table_version(&self) -> Result<Option<i64>, StoreError> {
        let mut connection = self.read.acquire().await?;
        // Names each table there is: a missing one fails here, before anything is computed for it.
        sqlx::query(
            "SELECT 1 WHERE EXISTS (SELECT 1 FROM runs) OR EXISTS (SELECT 1 FROM idempotency_keys) \
             OR EXISTS (SELECT 1 FROM networks) OR EXISTS (SELECT 1 FROM snapshots) \
             OR EXISTS (SELECT 1 FROM transitions) OR EXISTS (SELECT 1 FROM link_events) \
             OR EXISTS (SELECT 1 FROM jobs) OR EXISTS (SELECT 1 FROM network_runs) \
             OR EXISTS (SELECT 1 FROM latest_forecasts) OR EXISTS (SELECT 1 FROM accounts) \
             OR EXISTS (SELECT 1 FROM backtests) OR EXISTS (SELECT 1 FROM backtest_records) \
             OR EXISTS (SELECT 1 FROM kept_questions) OR EXISTS (SELECT 1 FROM notice_standings) \
             OR EXISTS (SELECT 1 FROM notices) OR EXISTS (SELECT 1 FROM notice_events) \
             OR EXISTS (SELECT 1 FROM access_keys) OR EXISTS (SELECT 1 FROM access_key_networks) \
             OR EXISTS (SELECT 1 FROM access_key_days) OR EXISTS (SELECT 1 FROM audit)",
        )
        .fetch_optional(&mut *connection)
        .await?;
        let version = sqlx::query_scalar("SELECT max(version) FROM _sqlx_migrations WHERE success");
        Ok(version.fetch_one(&mut *connection).await?)
    }

    /// Takes the lock of a write and gives it back.
    ///
    /// # Errors
    /// When the file cannot be written, or another process holds the lock.
    pub async fn try_write(&self) -> Result<(), StoreError> {
        // The writer is at work: proof enough.
        let Some(mut writer) = self.write.try_acquire() else { return Ok(()) };
        let trial = async { writer.begin_with("BEGIN IMMEDIATE").await?.rollback().await };
        match timeout(TRIAL_TIMEOUT, trial).await {
            Ok(outcome) => Ok(outcome?),
            Err(_) => Err(StoreError::Busy(sqlx::Error::PoolTimedOut)),
        }
    }

    /// Closes every connection, the writer last, so that the write-ahead log is folded into the file.
    pub async fn close(&self) {
        self.read.close().await;
        self.write.close().await;
    }
}

fn pool(size: u32) -> SqlitePoolOptions {
    // No idle or age limit: a local file's connections do not go stale.
    SqlitePoolOptions::new()
        .max_connections(size)
        .acquire_timeout(ACQUIRE_TIMEOUT)
        .idle_timeout(None)
        .max_lifetime(None)
}

//! The one way to a database, for the service and for tests alike.

use std::str::FromStr;
use std::time::Duration;

use sqlx::migrate::Migrator;
use sqlx::sqlite::{SqliteConnectOptions, SqliteJournalMode, SqlitePoolOptions, SqliteSynchronous};

use super::{Store, StoreError};
use crate::config::DatabaseConfig;

static MIGRATOR: Migrator = sqlx::migrate!("./migrations");

/// Longest wait for a free connection.
const ACQUIRE_TIMEOUT: Duration = Duration::from_secs(10);

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
        let writing = options.clone().create_if_missing(true).journal_mode(SqliteJournalMode::Wal);
        let write = pool(1).connect_with(writing).await.map_err(|error| address_fault(error.to_string()))?;
        // Opened after the writer, which creates the file and its write-ahead log.
        let read = pool(config.readers).connect_with(options.create_if_missing(false).read_only(true)).await?;
        Ok(Self { write, read })
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
    /// When it does not answer.
    pub async fn is_current(&self) -> Result<bool, StoreError> {
        let known = MIGRATOR.iter().map(|migration| migration.version).max();
        let found: Result<Option<i64>, sqlx::Error> =
            sqlx::query_scalar("SELECT max(version) FROM _sqlx_migrations WHERE success").fetch_one(&self.read).await;
        match found {
            Ok(version) => Ok(version == known),
            // The table is made by the first migration.
            Err(sqlx::Error::Database(error)) if error.message().contains("no such table") => Ok(false),
            Err(error) => Err(error.into()),
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

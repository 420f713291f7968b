//! The only SQL: runs and idempotency keys in SQLite.
//!
//! One connection writes, a pool of read-only ones reads. Every write is one `BEGIN IMMEDIATE` transaction at
//! `synchronous = FULL`: what was acknowledged is on disk, through a killed process and through a power cut.

mod connect;
mod runs;

use sqlx::SqlitePool;

pub use runs::{Inserted, KeyClaim, NewRun, RunFilter, RunKind, RunSummary, StoredRun};

/// The database.
#[derive(Debug, Clone)]
pub struct Store {
    write: SqlitePool,
    read: SqlitePool,
}

/// Why the database did not do as asked.
#[derive(Debug, thiserror::Error)]
pub enum StoreError {
    /// Another process held the lock, or every connection was taken, for too long.
    #[error("the database is busy")]
    Busy(#[source] sqlx::Error),
    /// The address in `database.url` cannot be used.
    #[error("database.url {url} cannot be used: {reason}")]
    Address {
        /// The address.
        url: String,
        /// Why not.
        reason: String,
    },
    /// The tables are not those of this version.
    #[error("the database's tables do not fit this version: {0}")]
    Migration(#[from] sqlx::migrate::MigrateError),
    /// A row does not hold what was written.
    #[error("the database holds a value that was never written: {0}")]
    Corrupt(String),
    /// Anything else.
    #[error("the database failed: {0}")]
    Failed(#[source] sqlx::Error),
}

impl From<sqlx::Error> for StoreError {
    fn from(error: sqlx::Error) -> Self {
        // SQLITE_BUSY is primary code 5; extended codes carry it in the low byte.
        let locked = |code: &str| code.parse::<u32>().is_ok_and(|code| code & 0xff == 5);
        match &error {
            sqlx::Error::PoolTimedOut => Self::Busy(error),
            sqlx::Error::Database(inner) if inner.code().is_some_and(|code| locked(&code)) => Self::Busy(error),
            _ => Self::Failed(error),
        }
    }
}

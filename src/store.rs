//! The only SQL: runs and their idempotency keys, tracked networks and what is known of them, jobs, in SQLite.
//!
//! One connection writes, a pool of read-only ones reads. A run and its key are one `BEGIN IMMEDIATE` transaction, and so
//! is every other write that looks before it leaps, each at `synchronous = FULL`: what was acknowledged is on disk, through a killed process
//! and through a power cut. A write into a file that no longer stands at its path is never acknowledged.

mod accounts;
mod audit;
mod backtests;
mod columns;
mod connect;
mod derived;
mod file;
mod jobs;
mod keys;
mod latest;
mod link_events;
mod networks;
mod news;
mod notices;
mod outbox;
mod questions;
mod refreshes;
mod runs;
mod snapshots;
mod spool;
mod transitions;
mod writes;

use std::path::PathBuf;
use std::sync::Arc;

use file::DatabaseFile;
use sqlx::SqlitePool;
use tokio::sync::watch;

pub use accounts::{AccountKey, IssuedRun, NewAccount, StoredAccount};
pub use audit::{AuditFilter, AuditLine, Authorship, author, authored, authored_on};
pub use backtests::{BacktestSummary, BacktestWrite, NewBacktest, StoredBacktest};
pub use derived::DerivedEvidence;
pub use jobs::{CalledOff, JobFilter, JobKind, JobState, StoredJob};
pub use keys::{Belonging, KeyScope, KeyUse, StoredKey};
pub use latest::{LatestForecast, LatestLine, LatestStamp, LatestWithCadence};
pub use link_events::StoredLinkEvents;
pub use networks::{NetworkSummary, NewNetwork, StoredEvidence, StoredNetwork};
pub use news::{IssuedForecast, RefreshNews};
pub use notices::{Deliveries, NewNotice, NoticeKind, StoredNotice};
pub use outbox::{DueNotice, PendingEvent, Signal};
pub use questions::{QuestionKind, StoredQuestion};
pub use refreshes::{Change, RefreshEnd, RefreshEnded, RefreshState, RefreshStatus};
pub use runs::{Inserted, KeyClaim, NewRun, RunFilter, RunKind, RunSummary, StoredOrigin, StoredRun};
pub use snapshots::{SnapshotSummary, StoredSnapshot};
pub use spool::Upload;
pub use transitions::{EndTags, StoredTransitions, TransitionsSummary};
pub use writes::{Caps, Clash, WriteError};

// Primary result codes: https://www.sqlite.org/rescode.html
const SQLITE_BUSY: u32 = 5;
const SQLITE_READONLY: u32 = 8;
const SQLITE_IOERR: u32 = 10;
const SQLITE_FULL: u32 = 13;
const SQLITE_CANTOPEN: u32 = 14;

/// The database.
#[derive(Debug, Clone)]
pub struct Store {
    write: SqlitePool,
    read: SqlitePool,
    file: DatabaseFile,
    /// Writes of this process that have ended.
    commits: Arc<watch::Sender<u64>>,
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
    /// The file was removed or replaced while it was open.
    #[error("the database file {path} was removed or replaced; restart the service to open what stands there now")]
    Gone {
        /// Where it stood.
        path: PathBuf,
    },
    /// The file can be neither read nor written as it stands: read-only, a full disk, a failing one.
    #[error("the database cannot be used: {0}")]
    Unusable(#[source] sqlx::Error),
    /// A table of this version is missing.
    #[error("a table is missing: {0}")]
    NoTable(#[source] sqlx::Error),
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
        let sqlx::Error::Database(inner) = &error else {
            return match error {
                sqlx::Error::PoolTimedOut => Self::Busy(error),
                sqlx::Error::Io(_) => Self::Unusable(error),
                _ => Self::Failed(error),
            };
        };
        // Extended result codes carry the primary one in the low byte.
        match inner.code().and_then(|code| code.parse::<u32>().ok()).map(|code| code & 0xff) {
            Some(SQLITE_BUSY) => Self::Busy(error),
            Some(SQLITE_READONLY | SQLITE_IOERR | SQLITE_FULL | SQLITE_CANTOPEN) => Self::Unusable(error),
            // The general code: the words alone tell a missing table from a mistake of ours.
            _ if inner.message().contains("no such table") => Self::NoTable(error),
            _ => Self::Failed(error),
        }
    }
}

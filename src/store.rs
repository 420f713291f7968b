//! The only SQL: runs and their idempotency keys, tracked networks and what is known of them, jobs, in SQLite or PostgreSQL.
//!
//! Of a file, one connection writes and a pool of read-only ones reads. A run and its key are one `BEGIN IMMEDIATE` transaction, and so
//! is every other write that looks before it leaps, each at `synchronous = FULL`: what was acknowledged is on disk, through a killed process
//! and through a power cut. A write into a file that no longer stands at its path is never acknowledged. On a server, which
//! replicas share, a write is alone among those of its scope (see `writes`), and its server's own settings say when it is on disk.

mod accounts;
mod audit;
mod backtests;
mod backup;
mod columns;
mod connect;
mod derived;
mod file;
mod health;
mod ids;
mod integrity;
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
mod retention;
mod runs;
mod sizes;
mod snapshots;
mod sources;
mod spool;
mod statement;
mod transitions;
mod writes;

use std::io::ErrorKind;
use std::path::PathBuf;
use std::sync::Arc;

use file::DatabaseFile;
use health::Health;
use sqlx::migrate::MigrateError;
use sqlx::postgres::PgDatabaseError;
use sqlx::{PgPool, SqlitePool};
use tokio::sync::watch;
use uuid::Uuid;

pub use accounts::{AccountKey, IssuedRun, NewAccount, StoredAccount};
pub use audit::{AuditFilter, AuditLine, Authorship, author, authored, authored_on};
pub use backtests::{BacktestSummary, BacktestWrite, NewBacktest, StoredBacktest};
pub use backup::{BackupError, BackupReport, RestoreReport, back_up, restore};
pub use columns::kept_now;
pub use derived::DerivedEvidence;
pub use health::StoreFault;
pub use ids::next_id;
pub use integrity::Checked;
pub use jobs::{CalledOff, JobFilter, JobKind, JobStart, JobState, StoredJob};
pub use keys::{Belonging, KeyScope, KeyUse, StoredKey};
pub use latest::{LatestForecast, LatestLine, LatestStamp, LatestWithCadence};
pub use link_events::StoredLinkEvents;
pub use networks::{NetworkSummary, NewNetwork, StoredEvidence, StoredNetwork};
pub use news::{IssuedForecast, RefreshNews};
pub use notices::{Deliveries, NewNotice, NoticeKind, StoredNotice};
pub use outbox::{DueNotice, PendingEvent, Signal};
pub use questions::{QuestionKind, StoredQuestion};
pub use refreshes::{Change, RefreshEnd, RefreshEnded, RefreshState, RefreshStatus};
pub use retention::{RetentionKind, RetentionRules};
pub use runs::{Inserted, KeyClaim, NewRun, RunFilter, RunKind, RunSummary, StoredOrigin, StoredRun};
pub use sizes::Sizes;
pub use snapshots::{SnapshotSummary, StoredSnapshot};
pub use sources::{ClaimedRun, NewSource, RunEnd, StoredSource};
pub use spool::{Spooled, Upload};
pub use transitions::{EndTags, StoredTransitions, TransitionsSummary};
pub use writes::{Caps, Clash, WriteCounts, WriteError};

// Primary result codes: https://www.sqlite.org/rescode.html
const SQLITE_BUSY: u32 = 5;
const SQLITE_READONLY: u32 = 8;
const SQLITE_IOERR: u32 = 10;
const SQLITE_CORRUPT: u32 = 11;
const SQLITE_FULL: u32 = 13;
const SQLITE_CANTOPEN: u32 = 14;
const SQLITE_NOTADB: u32 = 26;

// SQLSTATEs: https://www.postgresql.org/docs/15/errcodes-appendix.html
/// Serialisation failure, deadlock, lock not available, too many connections, a statement's time is over, what was referred to went meanwhile.
const POSTGRES_BUSY: [&str; 6] = ["40001", "40P01", "55P03", "53300", "57014", "23503"];
/// Connection lost, out of memory, shut down or starting, a failing system, no such database, not allowed in, idle for too long.
const POSTGRES_UNUSABLE: [&str; 7] = ["08", "53", "57P", "58", "3D000", "28", "25P03"];
const POSTGRES_FULL: &str = "53100";
const POSTGRES_READ_ONLY: &str = "25006";
const POSTGRES_NO_TABLE: &str = "42P01";

/// The database.
#[derive(Debug, Clone)]
pub struct Store {
    home: Home,
    /// Tells this process from others on the same database.
    process: Uuid,
    health: Health,
    /// Writes of this process that have ended.
    commits: Arc<watch::Sender<u64>>,
    counts: Arc<WriteCounts>,
}

/// Where rows live.
#[derive(Debug, Clone)]
enum Home {
    /// A file, of this process alone: one connection writes.
    Sqlite { write: SqlitePool, read: SqlitePool, file: DatabaseFile },
    /// A server, shared with other processes.
    Postgres { pool: PgPool },
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
    /// The disk is full.
    #[error("the disk that the database lies on is full: {0}")]
    Full(#[source] sqlx::Error),
    /// The file, or the file system it lies on, takes no writes.
    #[error("the database can only be read: {0}")]
    ReadOnly(#[source] sqlx::Error),
    /// The file is damaged; what was found.
    #[error(
        "the database file is damaged ({0}); stop the service, keep the file aside, and put a backup in its place with \
         `tailcast restore FILE`"
    )]
    Damaged(String),
    /// The file can be neither read nor written as it stands: a failing disk, a lost mount.
    #[error("the database cannot be used: {0}")]
    Unusable(#[source] sqlx::Error),
    /// A table of this version is missing.
    #[error("a table is missing: {0}")]
    NoTable(#[source] sqlx::Error),
    /// The tables are not those of this version.
    #[error("the database's tables do not fit this version: {0}")]
    Migration(#[source] MigrateError),
    /// A row does not hold what was written.
    #[error("the database holds a value that was never written: {0}")]
    Corrupt(String),
    /// Anything else.
    #[error("the database failed: {0}")]
    Failed(#[source] sqlx::Error),
}

impl From<MigrateError> for StoreError {
    fn from(error: MigrateError) -> Self {
        match error {
            // The database failed, whatever was asked of it.
            MigrateError::Execute(error) => error.into(),
            error => Self::Migration(error),
        }
    }
}

impl From<sqlx::Error> for StoreError {
    fn from(error: sqlx::Error) -> Self {
        let sqlx::Error::Database(inner) = &error else {
            return match error {
                sqlx::Error::PoolTimedOut => Self::Busy(error),
                sqlx::Error::Io(ref io) => match io.kind() {
                    ErrorKind::StorageFull | ErrorKind::QuotaExceeded | ErrorKind::FileTooLarge => Self::Full(error),
                    ErrorKind::ReadOnlyFilesystem => Self::ReadOnly(error),
                    _ => Self::Unusable(error),
                },
                sqlx::Error::Tls(_) => Self::Unusable(error),
                _ => Self::Failed(error),
            };
        };
        if let Some(inner) = inner.try_downcast_ref::<PgDatabaseError>() {
            return match inner.code() {
                code if POSTGRES_BUSY.contains(&code) => Self::Busy(error),
                POSTGRES_FULL => Self::Full(error),
                POSTGRES_READ_ONLY => Self::ReadOnly(error),
                code if POSTGRES_UNUSABLE.iter().any(|class| code.starts_with(class)) => Self::Unusable(error),
                POSTGRES_NO_TABLE => Self::NoTable(error),
                _ => Self::Failed(error),
            };
        }
        // Extended result codes carry the primary one in the low byte.
        match inner.code().and_then(|code| code.parse::<u32>().ok()).map(|code| code & 0xff) {
            Some(SQLITE_BUSY) => Self::Busy(error),
            Some(SQLITE_FULL) => Self::Full(error),
            Some(SQLITE_READONLY) => Self::ReadOnly(error),
            Some(SQLITE_CORRUPT | SQLITE_NOTADB) => Self::Damaged(error.to_string()),
            Some(SQLITE_IOERR | SQLITE_CANTOPEN) => Self::Unusable(error),
            // The general code: the words alone tell a missing table from a mistake of ours.
            _ if inner.message().contains("no such table") => Self::NoTable(error),
            _ => Self::Failed(error),
        }
    }
}

//! Writes that look before they leap: one transaction each, refused with data that says why.

use jiff::Timestamp;
use sqlx::{Sqlite, SqliteConnection, Transaction};
use tokio::sync::watch;
use uuid::Uuid;

use super::columns::unsigned;
use super::{Store, StoreError, audit};
use crate::model::DegreeKind;

/// Why a write was not done. Nothing was changed then.
#[derive(Debug, thiserror::Error)]
pub enum WriteError {
    /// There is no such network.
    #[error("there is no such network")]
    NoNetwork,
    /// There is nothing to change.
    #[error("there is nothing to change")]
    Missing,
    /// What stands there is not what the caller named.
    #[error("what stands there does not match")]
    Mismatch,
    /// It does not fit what is stored.
    #[error("it does not fit what is stored")]
    Clash(Clash),
    /// The database failed.
    #[error(transparent)]
    Store(#[from] StoreError),
}

impl From<sqlx::Error> for WriteError {
    fn from(error: sqlx::Error) -> Self {
        Self::Store(error.into())
    }
}

/// What stored evidence a write does not fit.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Clash {
    /// The kind of degree would change under stored counts.
    DegreeKind {
        /// The kind that holds.
        stored: DegreeKind,
    },
    /// A snapshot and a table of transitions have different counts at a date.
    Counts {
        /// The date.
        date: Timestamp,
        /// Start and end of the table.
        table: (Timestamp, Timestamp),
        /// Nodes by the table and by the snapshot.
        nodes: (u64, u64),
    },
    /// Two tables of transitions have different counts at the date where one ends and the other starts.
    Seam {
        /// The date.
        date: Timestamp,
        /// Start and end of the stored table.
        stored: (Timestamp, Timestamp),
    },
    /// Two tables of transitions overlap.
    Overlap {
        /// Start and end of the stored table.
        stored: (Timestamp, Timestamp),
    },
    /// As many snapshots, or tables of transitions, as one network may have.
    TooMany {
        /// Of what.
        what: &'static str,
        /// The most.
        most: u64,
    },
    /// The network has a job that has not ended.
    JobLive {
        /// The job.
        job: Uuid,
    },
    /// As many jobs as configured have not ended.
    TooManyJobs,
    /// More rows than one network may have.
    TooManyRows {
        /// Rows in all.
        total: u64,
        /// The most.
        most: u64,
    },
}

/// How much one network may have.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Caps {
    /// Snapshots, and tables of transitions.
    pub dates: u64,
    /// Rows of all of its evidence.
    pub rows: u64,
}

impl From<Clash> for WriteError {
    fn from(clash: Clash) -> Self {
        Self::Clash(clash)
    }
}

impl Store {
    /// Begins a write.
    pub(super) async fn begin(&self) -> Result<Transaction<'static, Sqlite>, StoreError> {
        self.file.check()?;
        Ok(self.write.begin_with("BEGIN IMMEDIATE").await?)
    }

    /// Ends a write, with its line in the trail: on disk when this returns.
    pub(super) async fn commit(&self, mut transaction: Transaction<'static, Sqlite>) -> Result<(), StoreError> {
        let author = audit::note(&mut transaction).await?;
        let committed = transaction.commit().await;
        // Whatever came of it: who holds a copy of what is stored looks again.
        self.commits.send_modify(|count| *count += 1);
        committed?;
        if let Some(author) = author {
            author.is_noted();
        }
        // The file may have gone in between.
        self.file.check()
    }

    /// Counts the writes of this process, each before it is acknowledged: what was read at one count is what is stored as long
    /// as the count stands, but for what other processes write.
    pub fn commits(&self) -> watch::Receiver<u64> {
        self.commits.subscribe()
    }
}

/// Checks that there is such a network.
pub(super) async fn network_exists(connection: &mut SqliteConnection, network: &str) -> Result<(), WriteError> {
    let found: Option<i64> =
        sqlx::query_scalar("SELECT 1 FROM networks WHERE name = $1").bind(network).fetch_optional(connection).await?;
    found.map(drop).ok_or(WriteError::NoNetwork)
}

/// Checks that `rows` rows in place of `replaced` ones leave the network within its cap.
pub(super) async fn room_for_rows(
    connection: &mut SqliteConnection,
    network: &str,
    (rows, replaced): (u64, u64),
    caps: &Caps,
) -> Result<(), WriteError> {
    let stored: i64 = sqlx::query_scalar(
        "SELECT CAST((SELECT coalesce(sum(row_count), 0) FROM snapshots WHERE network = $1) \
         + (SELECT coalesce(sum(row_count), 0) FROM transitions WHERE network = $1) \
         + (SELECT coalesce(sum(row_count), 0) FROM link_events WHERE network = $1) AS BIGINT)",
    )
    .bind(network)
    .fetch_one(connection)
    .await?;
    let total = unsigned("row_count", stored)?.saturating_sub(replaced).saturating_add(rows);
    if total > caps.rows { Err(Clash::TooManyRows { total, most: caps.rows }.into()) } else { Ok(()) }
}

/// Checks that one more of `stored` things leaves the network within its cap.
pub(super) fn room_for_one(what: &'static str, stored: i64, caps: &Caps) -> Result<(), WriteError> {
    if unsigned(what, stored)? >= caps.dates {
        return Err(Clash::TooMany { what, most: caps.dates }.into());
    }
    Ok(())
}

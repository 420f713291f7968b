//! Writes that look before they leap: one transaction each, refused with data that says why.

use std::hash::{DefaultHasher, Hash, Hasher};
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use jiff::Timestamp;
use tokio::sync::watch;
use uuid::Uuid;

use super::columns::unsigned;
use super::statement::{Connection, Held, Statement, in_time, query, query_scalar};
use super::{Home, Store, StoreError, audit};
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

/// What a write touches: on a server it is alone among the writes of the same scope, in whatever process, from its first look
/// to its end. A file has one writer, so that a write is always alone.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Scope<'a> {
    /// Rows that nobody else writes.
    Own,
    /// A network and all that hangs on it.
    Network(&'a str),
    /// The network of a job.
    OfJob(Uuid),
    /// The network of a notice.
    OfNotice(Uuid),
    /// The network of a backtest.
    OfBacktest(Uuid),
    /// The network of a run, where it has one.
    OfRun(Uuid),
    /// An idempotency key.
    Key(&'a str),
}

/// The networks whose latest forecasts a write may have changed.
#[derive(Debug, Clone, Copy)]
pub(super) enum Touched<'a> {
    Everything,
    Network(&'a str),
    Nothing,
}

/// Writes of this process by network. Networks share counts, so that all of it is a few kilobytes: a network's count is raised by each
/// of its own writes, and now and then by others'.
#[derive(Debug)]
pub struct WriteCounts {
    everything: AtomicU64,
    networks: [AtomicU64; SHARED_COUNTS],
}

const SHARED_COUNTS: usize = 1024;

impl Default for WriteCounts {
    fn default() -> Self {
        Self { everything: AtomicU64::default(), networks: [const { AtomicU64::new(0) }; SHARED_COUNTS] }
    }
}

impl WriteCounts {
    /// A network's count; it only rises.
    pub fn of(&self, network: &str) -> u64 {
        let own = self.shared(network).map_or(0, |count| count.load(Ordering::SeqCst));
        self.everything.load(Ordering::SeqCst) + own
    }

    fn raise(&self, touched: Touched<'_>) {
        let count = match touched {
            Touched::Everything => Some(&self.everything),
            Touched::Network(network) => self.shared(network),
            Touched::Nothing => None,
        };
        if let Some(count) = count {
            count.fetch_add(1, Ordering::SeqCst);
        }
    }

    fn shared(&self, network: &str) -> Option<&AtomicU64> {
        let mut hasher = DefaultHasher::new();
        network.hash(&mut hasher);
        self.networks.get(hasher.finish() as usize % SHARED_COUNTS)
    }
}

impl Store {
    /// Begins a write.
    pub(super) async fn begin(&self, scope: Scope<'_>) -> Result<Connection, StoreError> {
        match &self.home {
            Home::Sqlite { write, file, .. } => {
                file.check()?;
                self.health.check()?;
                Ok(Connection::Sqlite(Held::Transaction(write.begin_with("BEGIN IMMEDIATE").await?)))
            }
            Home::Postgres { pool } => {
                let mut transaction = Connection::Postgres(Held::Transaction(in_time(pool.begin()).await?));
                // Given up with the transaction. What is read after this is what the one before has written.
                if let Some(lock) = scope.lock() {
                    lock.execute(&mut transaction).await?;
                }
                Ok(transaction)
            }
        }
    }

    /// Ends a write, with its line in the trail: on disk when this returns.
    pub(super) async fn commit(&self, transaction: Connection) -> Result<(), StoreError> {
        self.commit_of(transaction, Touched::Everything).await
    }

    /// The same of a write that changes the latest forecasts of no more than it says.
    pub(super) async fn commit_of(&self, mut transaction: Connection, touched: Touched<'_>) -> Result<(), StoreError> {
        let author = audit::note(&mut transaction).await?;
        let committed = transaction.commit().await;
        // Whatever came of it: who holds a copy of what is stored looks again.
        self.counts.raise(touched);
        self.commits.send_modify(|count| *count += 1);
        let committed = committed.map_err(StoreError::from);
        self.health.note_write(committed.as_ref().map_err(StoreError::fault).copied());
        committed?;
        if let Some(author) = author {
            author.is_noted();
        }
        match &self.home {
            // The file may have gone in between.
            Home::Sqlite { file, .. } => file.check(),
            Home::Postgres { .. } => Ok(()),
        }
    }

    /// The writes of this process by the networks whose latest forecasts they may have changed, each counted before it is acknowledged:
    /// what was read at one count is what is stored as long as the count stands, but for what other processes write.
    pub fn counts(&self) -> Arc<WriteCounts> {
        self.counts.clone()
    }

    /// Counts all writes of this process.
    pub fn commits(&self) -> watch::Receiver<u64> {
        self.commits.subscribe()
    }
}

impl<'a> Scope<'a> {
    /// What takes PostgreSQL's advisory lock: unlike a row's, it can be had for what is yet to be written.
    fn lock(self) -> Option<Statement<'a>> {
        Some(match self {
            Self::Own => return None,
            Self::Network(name) => {
                query("SELECT pg_advisory_xact_lock(hashtextextended('network ' || $1, 0))").bind(name)
            }
            Self::OfJob(id) => query(
                "SELECT pg_advisory_xact_lock(hashtextextended('network ' || network, 0)) FROM jobs WHERE id = $1",
            )
            .bind(id.to_string()),
            Self::OfNotice(id) => query(
                "SELECT pg_advisory_xact_lock(hashtextextended('network ' || network, 0)) FROM notices WHERE id = $1",
            )
            .bind(id.to_string()),
            Self::OfBacktest(id) => query(
                "SELECT pg_advisory_xact_lock(hashtextextended('network ' || network, 0)) FROM backtests WHERE id = $1",
            )
            .bind(id.to_string()),
            Self::OfRun(id) => query(
                "SELECT pg_advisory_xact_lock(hashtextextended('network ' || network, 0)) FROM runs WHERE id = $1 \
                 AND network IS NOT NULL",
            )
            .bind(id.to_string()),
            Self::Key(key) => query("SELECT pg_advisory_xact_lock(hashtextextended('key ' || $1, 0))").bind(key),
        })
    }
}

/// Checks that there is such a network.
pub(super) async fn network_exists(connection: &mut Connection, network: &str) -> Result<(), WriteError> {
    let found: Option<i32> =
        query_scalar("SELECT 1 FROM networks WHERE name = $1").bind(network).fetch_optional(connection).await?;
    found.map(drop).ok_or(WriteError::NoNetwork)
}

/// Checks that `rows` rows in place of `replaced` ones leave the network within its cap.
pub(super) async fn room_for_rows(
    connection: &mut Connection,
    network: &str,
    (rows, replaced): (u64, u64),
    caps: &Caps,
) -> Result<(), WriteError> {
    let stored: i64 = query_scalar(
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

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_write_raises_the_counts_of_what_it_may_have_changed() {
        let counts = WriteCounts::default();
        // Of so many names only a few share a count with the first.
        let others: Vec<String> = (0..100).map(|i| format!("heronsgate-{i}")).collect();
        let of_others = || others.iter().map(|name| counts.of(name)).sum::<u64>();
        counts.raise(Touched::Network("heronsgate"));
        assert_eq!(counts.of("heronsgate"), 1);
        assert!(of_others() < 5);
        let before = of_others();
        counts.raise(Touched::Nothing);
        assert_eq!((counts.of("heronsgate"), of_others()), (1, before));
        counts.raise(Touched::Everything);
        assert_eq!((counts.of("heronsgate"), of_others()), (2, before + 100));
    }
}

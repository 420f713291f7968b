//! Snapshots of tracked networks.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, date_key, signed, time, total, unsigned};
use super::refreshes::{Change, changed, corrected};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Caps, Clash, Scope, Touched, WriteError, network_exists, room_for_one, room_for_rows};
use super::{Store, StoreError};

/// A snapshot's line in a list: everything but the counts themselves.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SnapshotSummary {
    /// The date its counts hold for.
    pub as_of: Timestamp,
    /// Nodes.
    pub nodes: u64,
    /// Link ends.
    pub link_ends: u128,
    /// Largest degree of any node, at most 2^53 − 1.
    pub largest_degree: u64,
    /// Distinct degrees.
    pub rows: u64,
    /// SHA-256 of the counts: the same for the same counts.
    pub tag: String,
    /// When it was last stored.
    pub updated_at: Timestamp,
}

/// A snapshot with its counts.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredSnapshot {
    /// Its line.
    pub summary: SnapshotSummary,
    /// The counts, JSON.
    pub degree_counts: String,
}

#[derive(FromRow)]
struct SnapshotRow {
    as_of: String,
    nodes: String,
    link_ends: String,
    largest_degree: i64,
    row_count: i64,
    tag: String,
    updated_at: i64,
}

#[derive(FromRow)]
struct CountsRow {
    #[sqlx(flatten)]
    summary: SnapshotRow,
    degree_counts: String,
}

impl Store {
    /// Stores a snapshot, and marks the runs that stand on other counts of its date; nothing is changed when the counts are
    /// those that stand there. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, transitions of that date have other counts, a cap is reached, or
    /// the database fails.
    pub async fn put_snapshot(
        &self,
        network: &str,
        snapshot: &StoredSnapshot,
        caps: &Caps,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Change, WriteError> {
        let summary = &snapshot.summary;
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, i64, i64, i64)> =
            query("SELECT tag, row_count, updated_at, revision FROM snapshots WHERE network = $1 AND as_of = $2")
                .bind(network)
                .bind(date_key(summary.as_of))
                .fetch_optional(&mut transaction)
                .await?;
        if !allows(stored.as_ref().map(|(tag, ..)| tag.as_str())) {
            return Err(WriteError::Mismatch);
        }
        if let Some((tag, _, updated_at, _)) = &stored
            && *tag == summary.tag
        {
            return Ok(Change { stands_since: Some(time(*updated_at)?), ..Change::default() });
        }
        fits_transitions(&mut transaction, network, summary).await?;
        let replaced = stored.as_ref().map_or(Ok(0), |&(_, rows, ..)| unsigned("row_count", rows))?;
        room_for_rows(&mut transaction, network, (summary.rows, replaced), caps).await?;
        if stored.is_none() {
            let count = query_scalar("SELECT count(*) FROM snapshots WHERE network = $1");
            room_for_one("snapshots", count.bind(network).fetch_one(&mut transaction).await?, caps)?;
        }
        if let Some((.., revision)) = stored {
            corrected(&mut transaction, network, unsigned("revision", revision)?).await?;
        }
        let (revision, refresh) = changed(&mut transaction, network).await?;
        insert(&mut transaction, network, snapshot, revision).await?;
        self.commit_of(transaction, Touched::Network(network)).await?;
        Ok(Change { made: stored.is_none(), stands_since: None, refresh })
    }

    /// A snapshot and its counts, if it is stored.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_snapshot(&self, network: &str, as_of: Timestamp) -> Result<Option<StoredSnapshot>, StoreError> {
        let row: Option<CountsRow> = query(
            "SELECT as_of, nodes, link_ends, largest_degree, row_count, tag, updated_at, degree_counts FROM snapshots \
             WHERE network = $1 AND as_of = $2",
        )
        .bind(network)
        .bind(date_key(as_of))
        .fetch_optional(&mut self.reader().await?)
        .await?;
        row.map(|row| Ok(StoredSnapshot { summary: row.summary.try_into()?, degree_counts: row.degree_counts }))
            .transpose()
    }

    /// Snapshots later than `after`, oldest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_snapshots(
        &self,
        network: &str,
        after: Option<Timestamp>,
        limit: u32,
    ) -> Result<Vec<SnapshotSummary>, StoreError> {
        let rows: Vec<SnapshotRow> = query(
            "SELECT as_of, nodes, link_ends, largest_degree, row_count, tag, updated_at FROM snapshots \
             WHERE network = $1 AND as_of > $2 ORDER BY as_of LIMIT $3",
        )
        .bind(network)
        .bind(after.map(date_key).unwrap_or_default())
        .bind(i64::from(limit))
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(SnapshotSummary::try_from).collect()
    }

    /// Deletes a snapshot, and marks the runs that stand on it; returns the refresh that was taken on.
    ///
    /// # Errors
    /// When it is not stored, `allows` refuses, or the database fails.
    pub async fn delete_snapshot(
        &self,
        network: &str,
        as_of: Timestamp,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Option<Uuid>, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, i64)> =
            query("SELECT tag, revision FROM snapshots WHERE network = $1 AND as_of = $2")
                .bind(network)
                .bind(date_key(as_of))
                .fetch_optional(&mut transaction)
                .await?;
        let (tag, revision) = stored.ok_or(WriteError::Missing)?;
        if !allows(Some(&tag)) {
            return Err(WriteError::Mismatch);
        }
        corrected(&mut transaction, network, unsigned("revision", revision)?).await?;
        query("DELETE FROM snapshots WHERE network = $1 AND as_of = $2")
            .bind(network)
            .bind(date_key(as_of))
            .execute(&mut transaction)
            .await?;
        let (_, refresh) = changed(&mut transaction, network).await?;
        self.commit_of(transaction, Touched::Network(network)).await?;
        Ok(refresh)
    }
}

/// Checks that transitions that start or end at the snapshot's date have its counts.
async fn fits_transitions(
    connection: &mut Connection,
    network: &str,
    snapshot: &SnapshotSummary,
) -> Result<(), WriteError> {
    let clash: Option<(String, String, String, String, String)> = query(
        "SELECT starts_at, ends_at, stayed, arrived, departed FROM transitions WHERE network = $1 \
         AND ((starts_at = $2 AND before_tag <> $3) OR (ends_at = $2 AND after_tag IS DISTINCT FROM $3)) \
         ORDER BY starts_at LIMIT 1",
    )
    .bind(network)
    .bind(date_key(snapshot.as_of))
    .bind(snapshot.tag.as_str())
    .fetch_optional(connection)
    .await?;
    let Some((from, to, stayed, arrived, departed)) = clash else { return Ok(()) };
    let (from, to) = (date(&from)?, date(&to)?);
    let other: u64 = if from == snapshot.as_of { total("departed", &departed)? } else { total("arrived", &arrived)? };
    let table = total::<u64>("stayed", &stayed)?.saturating_add(other);
    Err(Clash::Counts { date: snapshot.as_of, table: (from, to), nodes: (table, snapshot.nodes) }.into())
}

/// Stores a snapshot in place of the one of its date, if there is one.
pub(super) async fn insert(
    connection: &mut Connection,
    network: &str,
    snapshot: &StoredSnapshot,
    revision: u64,
) -> Result<(), StoreError> {
    let summary = &snapshot.summary;
    query(
        "INSERT INTO snapshots (network, as_of, nodes, link_ends, largest_degree, row_count, tag, updated_at, \
         degree_counts, revision) VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10) ON CONFLICT (network, as_of) DO UPDATE SET \
         nodes = excluded.nodes, link_ends = excluded.link_ends, largest_degree = excluded.largest_degree, \
         row_count = excluded.row_count, tag = excluded.tag, updated_at = excluded.updated_at, \
         degree_counts = excluded.degree_counts, revision = excluded.revision",
    )
    .bind(network)
    .bind(date_key(summary.as_of))
    .bind(summary.nodes.to_string())
    .bind(summary.link_ends.to_string())
    .bind(signed("largest_degree", summary.largest_degree)?)
    .bind(signed("row_count", summary.rows)?)
    .bind(summary.tag.as_str())
    .bind(summary.updated_at.as_microsecond())
    .bind(snapshot.degree_counts.as_str())
    .bind(signed("revision", revision)?)
    .execute(connection)
    .await?;
    Ok(())
}

impl TryFrom<SnapshotRow> for SnapshotSummary {
    type Error = StoreError;

    fn try_from(row: SnapshotRow) -> Result<Self, StoreError> {
        Ok(Self {
            as_of: date(&row.as_of)?,
            nodes: total("nodes", &row.nodes)?,
            link_ends: total("link_ends", &row.link_ends)?,
            largest_degree: unsigned("largest_degree", row.largest_degree)?,
            rows: unsigned("row_count", row.row_count)?,
            tag: row.tag,
            updated_at: time(row.updated_at)?,
        })
    }
}

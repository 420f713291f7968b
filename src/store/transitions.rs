//! Tables of transitions of tracked networks.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, date_key, signed, time, total, unsigned};
use super::refreshes::{Change, changed, corrected};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Caps, Clash, Scope, WriteError, network_exists, room_for_one, room_for_rows};
use super::{Store, StoreError};

/// A table's line in a list: everything but its rows.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TransitionsSummary {
    /// The earlier date.
    pub from: Timestamp,
    /// The later date.
    pub to: Timestamp,
    /// Nodes present at both dates.
    pub stayed: u64,
    /// Nodes that arrived.
    pub arrived: u64,
    /// Nodes that departed.
    pub departed: u64,
    /// Rows.
    pub rows: u64,
    /// SHA-256 of the rows.
    pub tag: String,
    /// When it was last stored.
    pub updated_at: Timestamp,
}

/// A table with its rows.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredTransitions {
    /// Its line.
    pub summary: TransitionsSummary,
    /// The rows, JSON.
    pub counts: String,
}

/// What snapshots of a table's two dates must have as their tags.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct EndTags {
    /// At the earlier date.
    pub before: String,
    /// At the later date; none when every node departed.
    pub after: Option<String>,
}

#[derive(FromRow)]
struct TransitionsRow {
    starts_at: String,
    ends_at: String,
    stayed: String,
    arrived: String,
    departed: String,
    row_count: i64,
    tag: String,
    updated_at: i64,
}

#[derive(FromRow)]
struct CountsRow {
    #[sqlx(flatten)]
    summary: TransitionsRow,
    counts: String,
}

impl Store {
    /// Stores a table of transitions, and marks the runs that stand on another between its dates; nothing is changed when the
    /// rows are those that stand there. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, a snapshot of one of its dates has other counts, another table
    /// overlaps, a cap is reached, or the database fails.
    pub async fn put_transitions(
        &self,
        network: &str,
        table: &StoredTransitions,
        ends: &EndTags,
        caps: &Caps,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Change, WriteError> {
        let summary = &table.summary;
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, i64, i64, i64)> = query(
            "SELECT tag, row_count, updated_at, revision FROM transitions \
             WHERE network = $1 AND starts_at = $2 AND ends_at = $3",
        )
        .bind(network)
        .bind(date_key(summary.from))
        .bind(date_key(summary.to))
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
        overlaps_none(&mut transaction, network, summary).await?;
        fits_snapshots(&mut transaction, network, summary, ends).await?;
        fits_neighbours(&mut transaction, network, summary, ends).await?;
        let replaced = stored.as_ref().map_or(Ok(0), |&(_, rows, ..)| unsigned("row_count", rows))?;
        room_for_rows(&mut transaction, network, (summary.rows, replaced), caps).await?;
        if stored.is_none() {
            let count = query_scalar("SELECT count(*) FROM transitions WHERE network = $1");
            room_for_one("tables of transitions", count.bind(network).fetch_one(&mut transaction).await?, caps)?;
        }
        if let Some((.., revision)) = stored {
            corrected(&mut transaction, network, unsigned("revision", revision)?).await?;
        }
        let (revision, refresh) = changed(&mut transaction, network).await?;
        insert(&mut transaction, network, (table, ends), revision).await?;
        self.commit(transaction).await?;
        Ok(Change { made: stored.is_none(), stands_since: None, refresh })
    }

    /// A table of transitions and its rows, if it is stored.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_transitions(
        &self,
        network: &str,
        from: Timestamp,
        to: Timestamp,
    ) -> Result<Option<StoredTransitions>, StoreError> {
        let row: Option<CountsRow> = query(
            "SELECT starts_at, ends_at, stayed, arrived, departed, row_count, tag, updated_at, counts FROM transitions \
             WHERE network = $1 AND starts_at = $2 AND ends_at = $3",
        )
        .bind(network)
        .bind(date_key(from))
        .bind(date_key(to))
        .fetch_optional(&mut self.reader().await?)
        .await?;
        row.map(|row| Ok(StoredTransitions { summary: row.summary.try_into()?, counts: row.counts })).transpose()
    }

    /// Tables that start later than `after`, oldest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_transitions(
        &self,
        network: &str,
        after: Option<Timestamp>,
        limit: u32,
    ) -> Result<Vec<TransitionsSummary>, StoreError> {
        let rows: Vec<TransitionsRow> = query(
            "SELECT starts_at, ends_at, stayed, arrived, departed, row_count, tag, updated_at FROM transitions \
             WHERE network = $1 AND starts_at > $2 ORDER BY starts_at LIMIT $3",
        )
        .bind(network)
        .bind(after.map(date_key).unwrap_or_default())
        .bind(i64::from(limit))
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(TransitionsSummary::try_from).collect()
    }

    /// Deletes a table of transitions, and marks the runs that stand on it; returns the refresh that was taken on.
    ///
    /// # Errors
    /// When it is not stored, `allows` refuses, or the database fails.
    pub async fn delete_transitions(
        &self,
        network: &str,
        (from, to): (Timestamp, Timestamp),
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Option<Uuid>, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, i64)> =
            query("SELECT tag, revision FROM transitions WHERE network = $1 AND starts_at = $2 AND ends_at = $3")
                .bind(network)
                .bind(date_key(from))
                .bind(date_key(to))
                .fetch_optional(&mut transaction)
                .await?;
        let (tag, revision) = stored.ok_or(WriteError::Missing)?;
        if !allows(Some(&tag)) {
            return Err(WriteError::Mismatch);
        }
        corrected(&mut transaction, network, unsigned("revision", revision)?).await?;
        query("DELETE FROM transitions WHERE network = $1 AND starts_at = $2")
            .bind(network)
            .bind(date_key(from))
            .execute(&mut transaction)
            .await?;
        let (_, refresh) = changed(&mut transaction, network).await?;
        self.commit(transaction).await?;
        Ok(refresh)
    }
}

/// Checks that no stored table but the one of the very same dates shares time with `table`.
async fn overlaps_none(
    connection: &mut Connection,
    network: &str,
    table: &TransitionsSummary,
) -> Result<(), WriteError> {
    let clash: Option<(String, String)> = query(
        "SELECT starts_at, ends_at FROM transitions WHERE network = $1 AND starts_at < $3 AND ends_at > $2 \
         AND NOT (starts_at = $2 AND ends_at = $3) ORDER BY starts_at LIMIT 1",
    )
    .bind(network)
    .bind(date_key(table.from))
    .bind(date_key(table.to))
    .fetch_optional(connection)
    .await?;
    match clash {
        Some((from, to)) => Err(Clash::Overlap { stored: (date(&from)?, date(&to)?) }.into()),
        None => Ok(()),
    }
}

/// Checks that stored tables that end where `table` starts, or start where it ends, have its counts there.
async fn fits_neighbours(
    connection: &mut Connection,
    network: &str,
    table: &TransitionsSummary,
    ends: &EndTags,
) -> Result<(), WriteError> {
    let clash: Option<(String, String)> = query(
        "SELECT starts_at, ends_at FROM transitions WHERE network = $1 \
         AND ((ends_at = $2 AND after_tag IS DISTINCT FROM $3) OR (starts_at = $4 AND before_tag IS DISTINCT FROM $5)) \
         ORDER BY starts_at LIMIT 1",
    )
    .bind(network)
    .bind(date_key(table.from))
    .bind(ends.before.as_str())
    .bind(date_key(table.to))
    .bind(ends.after.as_deref())
    .fetch_optional(connection)
    .await?;
    let Some((from, to)) = clash else { return Ok(()) };
    let stored = (date(&from)?, date(&to)?);
    let seam = if stored.1 == table.from { table.from } else { table.to };
    Err(Clash::Seam { date: seam, stored }.into())
}

/// Checks that the stored snapshots of its two dates have its counts.
async fn fits_snapshots(
    connection: &mut Connection,
    network: &str,
    table: &TransitionsSummary,
    ends: &EndTags,
) -> Result<(), WriteError> {
    let (before, after) = (table.stayed.saturating_add(table.departed), table.stayed.saturating_add(table.arrived));
    let clash: Option<(String, String)> = query(
        "SELECT as_of, nodes FROM snapshots WHERE network = $1 \
         AND ((as_of = $2 AND tag <> $3) OR (as_of = $4 AND tag IS DISTINCT FROM $5)) ORDER BY as_of LIMIT 1",
    )
    .bind(network)
    .bind(date_key(table.from))
    .bind(ends.before.as_str())
    .bind(date_key(table.to))
    .bind(ends.after.as_deref())
    .fetch_optional(connection)
    .await?;
    let Some((as_of, nodes)) = clash else { return Ok(()) };
    let as_of = date(&as_of)?;
    let by_table = if as_of == table.from { before } else { after };
    let nodes = (by_table, total("nodes", &nodes)?);
    Err(Clash::Counts { date: as_of, table: (table.from, table.to), nodes }.into())
}

/// Stores a table in place of the one that starts at the same date, if there is one.
pub(super) async fn insert(
    connection: &mut Connection,
    network: &str,
    (table, ends): (&StoredTransitions, &EndTags),
    revision: u64,
) -> Result<(), StoreError> {
    let summary = &table.summary;
    query(
        "INSERT INTO transitions (network, starts_at, ends_at, stayed, arrived, departed, row_count, tag, before_tag, \
         after_tag, updated_at, counts, revision) VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11, $12, $13) \
         ON CONFLICT (network, starts_at) DO UPDATE SET ends_at = excluded.ends_at, stayed = excluded.stayed, \
         arrived = excluded.arrived, departed = excluded.departed, row_count = excluded.row_count, tag = excluded.tag, \
         before_tag = excluded.before_tag, after_tag = excluded.after_tag, updated_at = excluded.updated_at, \
         counts = excluded.counts, revision = excluded.revision",
    )
    .bind(network)
    .bind(date_key(summary.from))
    .bind(date_key(summary.to))
    .bind(summary.stayed.to_string())
    .bind(summary.arrived.to_string())
    .bind(summary.departed.to_string())
    .bind(signed("row_count", summary.rows)?)
    .bind(summary.tag.as_str())
    .bind(ends.before.as_str())
    .bind(ends.after.as_deref())
    .bind(summary.updated_at.as_microsecond())
    .bind(table.counts.as_str())
    .bind(signed("revision", revision)?)
    .execute(connection)
    .await?;
    Ok(())
}

impl TryFrom<TransitionsRow> for TransitionsSummary {
    type Error = StoreError;

    fn try_from(row: TransitionsRow) -> Result<Self, StoreError> {
        Ok(Self {
            from: date(&row.starts_at)?,
            to: date(&row.ends_at)?,
            stayed: total("stayed", &row.stayed)?,
            arrived: total("arrived", &row.arrived)?,
            departed: total("departed", &row.departed)?,
            rows: unsigned("row_count", row.row_count)?,
            tag: row.tag,
            updated_at: time(row.updated_at)?,
        })
    }
}

//! Attachment statistics of tracked networks: at most one a network.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{signed, time, total, unsigned};
use super::refreshes::{Change, changed};
use super::statement::{Connection, query};
use super::writes::{Caps, Scope, WriteError, network_exists, room_for_rows};
use super::{Store, StoreError};

/// Attachment statistics as stored.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredLinkEvents {
    /// Landing ends.
    pub landings: u64,
    /// Ratio classes and cells.
    pub rows: u64,
    /// SHA-256 of the statistics.
    pub tag: String,
    /// When they were last stored.
    pub updated_at: Timestamp,
    /// The statistics, JSON.
    pub statistics: String,
}

#[derive(FromRow)]
struct LinkEventsRow {
    landings: String,
    row_count: i64,
    tag: String,
    updated_at: i64,
    statistics: String,
}

impl Store {
    /// Stores a network's attachment statistics; nothing is changed when they are those that stand there. `allows` is asked
    /// about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, a cap is reached, or the database fails.
    pub async fn put_link_events(
        &self,
        network: &str,
        events: &StoredLinkEvents,
        caps: &Caps,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Change, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored = stored_tag(&mut transaction, network).await?;
        if !allows(stored.as_ref().map(|(tag, ..)| tag.as_str())) {
            return Err(WriteError::Mismatch);
        }
        if let Some((tag, _, updated_at)) = &stored
            && *tag == events.tag
        {
            return Ok(Change { stands_since: Some(time(*updated_at)?), ..Change::default() });
        }
        let replaced = stored.as_ref().map_or(Ok(0), |&(_, rows, _)| unsigned("row_count", rows))?;
        room_for_rows(&mut transaction, network, (events.rows, replaced), caps).await?;
        let (_, refresh) = changed(&mut transaction, network).await?;
        insert(&mut transaction, network, events).await?;
        self.commit(transaction).await?;
        Ok(Change { made: stored.is_none(), stands_since: None, refresh })
    }

    /// A network's attachment statistics, if they are stored.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_link_events(&self, network: &str) -> Result<Option<StoredLinkEvents>, StoreError> {
        let row: Option<LinkEventsRow> =
            query("SELECT landings, row_count, tag, updated_at, statistics FROM link_events WHERE network = $1")
                .bind(network)
                .fetch_optional(&mut self.reader().await?)
                .await?;
        row.map(StoredLinkEvents::try_from).transpose()
    }

    /// Deletes a network's attachment statistics; returns the refresh that was taken on.
    ///
    /// # Errors
    /// When there are none, `allows` refuses, or the database fails.
    pub async fn delete_link_events(
        &self,
        network: &str,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Option<Uuid>, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let (tag, ..) = stored_tag(&mut transaction, network).await?.ok_or(WriteError::Missing)?;
        if !allows(Some(&tag)) {
            return Err(WriteError::Mismatch);
        }
        query("DELETE FROM link_events WHERE network = $1").bind(network).execute(&mut transaction).await?;
        let (_, refresh) = changed(&mut transaction, network).await?;
        self.commit(transaction).await?;
        Ok(refresh)
    }
}

/// Digest, rows and time of what is stored.
async fn stored_tag(connection: &mut Connection, network: &str) -> Result<Option<(String, i64, i64)>, StoreError> {
    let row = query("SELECT tag, row_count, updated_at FROM link_events WHERE network = $1").bind(network);
    Ok(row.fetch_optional(connection).await?)
}

/// Stores statistics in place of those the network has, if any.
pub(super) async fn insert(
    connection: &mut Connection,
    network: &str,
    events: &StoredLinkEvents,
) -> Result<(), StoreError> {
    query(
        "INSERT INTO link_events (network, landings, row_count, tag, updated_at, statistics) \
         VALUES ($1, $2, $3, $4, $5, $6) ON CONFLICT (network) DO UPDATE SET landings = excluded.landings, \
         row_count = excluded.row_count, tag = excluded.tag, updated_at = excluded.updated_at, \
         statistics = excluded.statistics",
    )
    .bind(network)
    .bind(events.landings.to_string())
    .bind(signed("row_count", events.rows)?)
    .bind(events.tag.as_str())
    .bind(events.updated_at.as_microsecond())
    .bind(events.statistics.as_str())
    .execute(connection)
    .await?;
    Ok(())
}

impl TryFrom<LinkEventsRow> for StoredLinkEvents {
    type Error = StoreError;

    fn try_from(row: LinkEventsRow) -> Result<Self, StoreError> {
        Ok(Self {
            landings: total("landings", &row.landings)?,
            rows: unsigned("row_count", row.row_count)?,
            tag: row.tag,
            updated_at: time(row.updated_at)?,
            statistics: row.statistics,
        })
    }
}

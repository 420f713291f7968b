//! Notices: who is told of what, and how that fares.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{corrupt, time, unsigned, uuid};
use super::ids::next_id;
use super::statement::{Connection, query, query_scalar};
use super::writes::{Caps, Scope, WriteError, network_exists, room_for_one};
use super::{Store, StoreError};

/// What can be told.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum NoticeKind {
    /// That a limit's risk passes its line, or is within it again.
    LimitRisk,
    /// That forecasts drift, or do no longer.
    Drift,
}

impl NoticeKind {
    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::LimitRisk => "limit_risk",
            Self::Drift => "drift",
        }
    }

    pub(super) fn named(name: &str) -> Result<Self, StoreError> {
        [Self::LimitRisk, Self::Drift]
            .into_iter()
            .find(|kind| kind.as_str() == name)
            .ok_or_else(|| corrupt("kind", name))
    }
}

/// A notice to keep.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewNotice {
    /// Its name, one of its network's.
    pub name: String,
    /// SHA-256 of the rest.
    pub tag: String,
    /// Where it goes.
    pub url: String,
    /// What it tells.
    pub kinds: Vec<NoticeKind>,
    /// When it is stored.
    pub updated_at: Timestamp,
}

/// A notice as it is kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredNotice {
    /// As it was stored.
    pub notice: NewNotice,
    /// How its events fare.
    pub deliveries: Deliveries,
}

/// How a notice's events fare.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Deliveries {
    /// Events that wait.
    pub pending: u64,
    /// Events taken.
    pub delivered: u64,
    /// When the last of them was.
    pub delivered_at: Option<Timestamp>,
    /// Events that were never taken.
    pub given_up: u64,
    /// When the last of them was given up.
    pub given_up_at: Option<Timestamp>,
    /// Attempts that failed since the last that did not.
    pub failures: u64,
    /// When the last one failed.
    pub failed_at: Option<Timestamp>,
    /// Why, in words.
    pub failure: Option<String>,
    /// When the next attempt is due.
    pub due_at: Option<Timestamp>,
}

#[derive(FromRow)]
struct NoticeRow {
    name: String,
    tag: String,
    url: String,
    limit_risk: bool,
    drift: bool,
    updated_at: i64,
    pending: i64,
    delivered: i64,
    delivered_at: Option<i64>,
    given_up: i64,
    given_up_at: Option<i64>,
    failures: i64,
    failed_at: Option<i64>,
    failure: Option<String>,
    due_at: Option<i64>,
}

impl Store {
    /// Keeps a notice in place of the one of its name; true when there was none. What waits goes to the new address, at once. Storing it
    /// as it stands has what waits tried at once too, and leaves its time. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, the network has `most` notices, or the database fails.
    pub async fn put_notice(
        &self,
        network: &str,
        notice: &NewNotice,
        most: u64,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<bool, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, String)> = query("SELECT id, tag FROM notices WHERE network = $1 AND name = $2")
            .bind(network)
            .bind(notice.name.as_str())
            .fetch_optional(&mut transaction)
            .await?;
        if !allows(stored.as_ref().map(|(_, tag)| tag.as_str())) {
            return Err(WriteError::Mismatch);
        }
        let made = stored.is_none();
        match stored {
            None => {
                let count = query_scalar("SELECT count(*) FROM notices WHERE network = $1");
                let count = count.bind(network).fetch_one(&mut transaction).await?;
                room_for_one("notices", count, &Caps { dates: most, rows: 0 })?;
                insert(&mut transaction, network, notice).await?;
            }
            Some((id, tag)) => {
                if tag != notice.tag {
                    replace(&mut transaction, &id, notice).await?;
                }
                query(
                    "UPDATE notices SET failures = 0, due_at = CASE WHEN EXISTS (SELECT 1 FROM notice_events \
                     WHERE notice = $1 AND state = 'pending') THEN $2 END WHERE id = $1",
                )
                .bind(&id)
                .bind(notice.updated_at.as_microsecond())
                .execute(&mut transaction)
                .await?;
            }
        }
        self.commit(transaction).await?;
        Ok(made)
    }

    /// A notice, if it is kept.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_notice(&self, network: &str, name: &str) -> Result<Option<StoredNotice>, StoreError> {
        let row: Option<NoticeRow> = query(
            "SELECT name, tag, url, limit_risk, drift, updated_at, (SELECT count(*) FROM notice_events \
             WHERE notice = notices.id AND state = 'pending') AS pending, delivered, delivered_at, given_up, given_up_at, \
             failures, failed_at, failure, due_at FROM notices WHERE network = $1 AND name = $2",
        )
        .bind(network)
        .bind(name)
        .fetch_optional(&mut self.reader().await?)
        .await?;
        row.map(StoredNotice::try_from).transpose()
    }

    /// Notices whose name comes after `after`, in the order of their names.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_notices(
        &self,
        network: &str,
        after: Option<&str>,
        limit: u32,
    ) -> Result<Vec<StoredNotice>, StoreError> {
        let rows: Vec<NoticeRow> = query(
            "SELECT name, tag, url, limit_risk, drift, updated_at, (SELECT count(*) FROM notice_events \
             WHERE notice = notices.id AND state = 'pending') AS pending, delivered, delivered_at, given_up, given_up_at, \
             failures, failed_at, failure, due_at FROM notices WHERE network = $1 AND name > $2 ORDER BY name LIMIT $3",
        )
        .bind(network)
        .bind(after.unwrap_or_default())
        .bind(i64::from(limit))
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(StoredNotice::try_from).collect()
    }

    /// Deletes a notice and its events, those that wait too. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or notice, `allows` refuses, or the database fails.
    pub async fn delete_notice(
        &self,
        network: &str,
        name: &str,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<(), WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<String> = query_scalar("SELECT tag FROM notices WHERE network = $1 AND name = $2")
            .bind(network)
            .bind(name)
            .fetch_optional(&mut transaction)
            .await?;
        if !allows(Some(&stored.ok_or(WriteError::Missing)?)) {
            return Err(WriteError::Mismatch);
        }
        query("DELETE FROM notices WHERE network = $1 AND name = $2")
            .bind(network)
            .bind(name)
            .execute(&mut transaction)
            .await?;
        Ok(self.commit(transaction).await?)
    }
}

async fn insert(connection: &mut Connection, network: &str, notice: &NewNotice) -> Result<(), StoreError> {
    query(
        "INSERT INTO notices (id, network, name, created_at, updated_at, tag, limit_risk, drift, url) \
         VALUES ($1, $2, $3, $4, $4, $5, $6, $7, $8)",
    )
    .bind(next_id().to_string())
    .bind(network)
    .bind(notice.name.as_str())
    .bind(notice.updated_at.as_microsecond())
    .bind(notice.tag.as_str())
    .bind(notice.kinds.contains(&NoticeKind::LimitRisk))
    .bind(notice.kinds.contains(&NoticeKind::Drift))
    .bind(notice.url.as_str())
    .execute(connection)
    .await?;
    Ok(())
}

async fn replace(connection: &mut Connection, id: &str, notice: &NewNotice) -> Result<(), StoreError> {
    query(
        "UPDATE notices SET updated_at = CASE WHEN $2 > created_at THEN $2 ELSE created_at END, tag = $3, limit_risk = $4, \
         drift = $5, url = $6 WHERE id = $1",
    )
    .bind(id)
    .bind(notice.updated_at.as_microsecond())
    .bind(notice.tag.as_str())
    .bind(notice.kinds.contains(&NoticeKind::LimitRisk))
    .bind(notice.kinds.contains(&NoticeKind::Drift))
    .bind(notice.url.as_str())
    .execute(&mut *connection)
    .await?;
    // What it does not tell any more it begins anew with when it does again.
    for kind in [NoticeKind::LimitRisk, NoticeKind::Drift] {
        if !notice.kinds.contains(&kind) {
            query("DELETE FROM notice_standings WHERE notice = $1 AND kind = $2")
                .bind(id)
                .bind(kind.as_str())
                .execute(&mut *connection)
                .await?;
        }
    }
    Ok(())
}

impl TryFrom<NoticeRow> for StoredNotice {
    type Error = StoreError;

    fn try_from(row: NoticeRow) -> Result<Self, StoreError> {
        let told = [(NoticeKind::LimitRisk, row.limit_risk), (NoticeKind::Drift, row.drift)];
        let moment = |micros: Option<i64>| micros.map(time).transpose();
        Ok(Self {
            notice: NewNotice {
                name: row.name,
                tag: row.tag,
                url: row.url,
                kinds: told.into_iter().filter_map(|(kind, told)| told.then_some(kind)).collect(),
                updated_at: time(row.updated_at)?,
            },
            deliveries: Deliveries {
                pending: unsigned("pending", row.pending)?,
                delivered: unsigned("delivered", row.delivered)?,
                delivered_at: moment(row.delivered_at)?,
                given_up: unsigned("given_up", row.given_up)?,
                given_up_at: moment(row.given_up_at)?,
                failures: unsigned("failures", row.failures)?,
                failed_at: moment(row.failed_at)?,
                failure: row.failure,
                due_at: moment(row.due_at)?,
            },
        })
    }
}

/// The ids of a network's notices that tell of a kind.
pub(super) async fn telling(
    connection: &mut Connection,
    network: &str,
    kind: NoticeKind,
) -> Result<Vec<Uuid>, StoreError> {
    let ids: Vec<String> = query_scalar(
        "SELECT id FROM notices WHERE network = $1 AND ($2 = 'limit_risk' AND limit_risk OR $2 = 'drift' AND drift) ORDER BY id",
    )
    .bind(network)
    .bind(kind.as_str())
    .fetch_all(connection)
    .await?;
    ids.iter().map(|id| uuid(id)).collect()
}

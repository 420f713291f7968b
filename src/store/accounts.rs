//! Issued forecasts, and the accounts of what later snapshots showed of them.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, date_key, time, uuid};
use super::statement::{Connection, query};
use super::{Store, StoreError};

/// A forecast that a refresh issued.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct IssuedRun {
    /// The run.
    pub id: Uuid,
    /// Date of the newest counts it stands on.
    pub origin: Timestamp,
    /// Last date it reaches to.
    pub issued_to: Timestamp,
}

/// Which snapshot a stored account holds which forecast against.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AccountKey {
    /// The forecast.
    pub run: Uuid,
    /// The snapshot's date.
    pub as_of: Timestamp,
    /// SHA-256 of its counts.
    pub snapshot_tag: String,
}

/// An account to keep.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewAccount {
    /// What is held against what.
    pub key: AccountKey,
    /// The account, JSON.
    pub account: String,
}

/// An account as kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredAccount {
    /// The forecast.
    pub run: Uuid,
    /// When it was issued.
    pub issued_at: Timestamp,
    /// When counts it stands on were last replaced.
    pub evidence_corrected_at: Option<Timestamp>,
    /// The snapshot's date.
    pub as_of: Timestamp,
    /// The account, JSON.
    pub account: String,
}

#[derive(FromRow)]
struct AccountRow {
    run_id: String,
    issued_at: i64,
    evidence_corrected_at: Option<i64>,
    as_of: String,
    account: String,
}

impl Store {
    /// Every forecast that refreshes of a network issued, newest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_issued(&self, network: &str) -> Result<Vec<IssuedRun>, StoreError> {
        let rows: Vec<(String, String, String)> = query(
            "SELECT run_id, origin, issued_to FROM network_runs WHERE network = $1 AND issued_to IS NOT NULL \
             ORDER BY run_id DESC",
        )
        .bind(network)
        .fetch_all(&mut self.reader().await?)
        .await?;
        let issued = |(id, origin, issued_to): (String, String, String)| {
            Ok(IssuedRun { id: uuid(&id)?, origin: date(&origin)?, issued_to: date(&issued_to)? })
        };
        rows.into_iter().map(issued).collect()
    }

    /// What the accounts of a network hold against what.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_account_keys(&self, network: &str) -> Result<Vec<AccountKey>, StoreError> {
        let rows: Vec<(String, String, String)> =
            query("SELECT run_id, as_of, snapshot_tag FROM accounts WHERE network = $1")
                .bind(network)
                .fetch_all(&mut self.reader().await?)
                .await?;
        let key = |(run, as_of, snapshot_tag): (String, String, String)| {
            Ok(AccountKey { run: uuid(&run)?, as_of: date(&as_of)?, snapshot_tag })
        };
        rows.into_iter().map(key).collect()
    }

    /// The accounts of the newest `forecasts` forecasts of a network that have any: newest forecast first, dates ascending.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_accounts(&self, network: &str, forecasts: u32) -> Result<Vec<StoredAccount>, StoreError> {
        let rows: Vec<AccountRow> = query(
            "SELECT a.run_id, r.created_at AS issued_at, n.evidence_corrected_at, a.as_of, a.account FROM accounts a \
             JOIN runs r ON r.id = a.run_id JOIN network_runs n ON n.run_id = a.run_id WHERE a.network = $1 AND a.run_id IN \
             (SELECT DISTINCT run_id FROM accounts WHERE network = $1 ORDER BY run_id DESC LIMIT $2) \
             ORDER BY a.run_id DESC, a.as_of",
        )
        .bind(network)
        .bind(i64::from(forecasts))
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(StoredAccount::try_from).collect()
    }
}

/// Keeps an account in place of the one of its forecast and date; not when its forecast was deleted meanwhile.
pub(super) async fn insert(connection: &mut Connection, network: &str, account: &NewAccount) -> Result<(), StoreError> {
    query(
        "INSERT INTO accounts (run_id, as_of, network, snapshot_tag, created_at, account) \
         SELECT run_id, $2, $3, $4, $5, $6 FROM network_runs WHERE run_id = $1 ON CONFLICT (run_id, as_of) DO UPDATE SET \
         snapshot_tag = excluded.snapshot_tag, created_at = excluded.created_at, account = excluded.account",
    )
    .bind(account.key.run.to_string())
    .bind(date_key(account.key.as_of))
    .bind(network)
    .bind(account.key.snapshot_tag.as_str())
    .bind(Timestamp::now().as_microsecond())
    .bind(account.account.as_str())
    .execute(connection)
    .await?;
    Ok(())
}

/// Takes an account away.
pub(super) async fn withdraw(connection: &mut Connection, run: Uuid, as_of: Timestamp) -> Result<(), StoreError> {
    query("DELETE FROM accounts WHERE run_id = $1 AND as_of = $2")
        .bind(run.to_string())
        .bind(date_key(as_of))
        .execute(connection)
        .await?;
    Ok(())
}

impl TryFrom<AccountRow> for StoredAccount {
    type Error = StoreError;

    fn try_from(row: AccountRow) -> Result<Self, StoreError> {
        Ok(Self {
            run: uuid(&row.run_id)?,
            issued_at: time(row.issued_at)?,
            evidence_corrected_at: row.evidence_corrected_at.map(time).transpose()?,
            as_of: date(&row.as_of)?,
            account: row.account,
        })
    }
}

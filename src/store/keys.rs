//! Access keys: what is kept of them, what they have used, and whose network a thing belongs to.

use std::str::FromStr;

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{corrupt, signed, time, unsigned};
use super::statement::{Connection, query, query_scalar};
use super::writes::Scope;
use super::{Store, StoreError};

/// What a key allows; each includes those before it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum KeyScope {
    /// Reading.
    Read,
    /// Reading and writing.
    Write,
    /// All of it, the trail of writes included.
    Admin,
}

impl KeyScope {
    const ALL: [Self; 3] = [Self::Read, Self::Write, Self::Admin];

    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Read => "read",
            Self::Write => "write",
            Self::Admin => "admin",
        }
    }
}

impl FromStr for KeyScope {
    type Err = StoreError;

    fn from_str(name: &str) -> Result<Self, StoreError> {
        Self::ALL.into_iter().find(|scope| scope.as_str() == name).ok_or_else(|| corrupt("scope", name))
    }
}

/// A key as stored.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredKey {
    /// The part that is not secret.
    pub id: String,
    /// What people call it; of those not revoked, one has it.
    pub name: String,
    /// What it allows.
    pub scope: KeyScope,
    /// SHA-256 of the secret part, hexadecimal.
    pub digest: String,
    /// The networks it is bound to, in the order of their names; none: it is not bound.
    pub networks: Vec<String>,
    /// Most requests a minute.
    pub per_minute: Option<u32>,
    /// Most requests a day (UTC).
    pub per_day: Option<u64>,
    /// When it was made.
    pub created_at: Timestamp,
    /// When it ends by itself.
    pub expires_at: Option<Timestamp>,
    /// When it was last used, to within the time between two saves.
    pub last_used_at: Option<Timestamp>,
    /// When it was revoked.
    pub revoked_at: Option<Timestamp>,
}

/// What a key has used since the last save.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct KeyUse {
    /// The key's id.
    pub id: String,
    /// The day, since 1970-01-01 UTC.
    pub day: i64,
    /// Requests on it.
    pub requests: u64,
    /// When the last came.
    pub last_used_at: Timestamp,
}

/// What can belong to a network and is found by an id of its own.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Belonging {
    /// A forecast or fit.
    Run,
    /// A job.
    Job,
    /// A backtest.
    Backtest,
}

#[derive(FromRow)]
struct KeyRow {
    id: String,
    name: String,
    scope: String,
    digest: String,
    per_minute: Option<i64>,
    per_day: Option<i64>,
    created_at: i64,
    expires_at: Option<i64>,
    last_used_at: Option<i64>,
    revoked_at: Option<i64>,
}

impl Store {
    /// Stores a new key; false when one that is not revoked has its name.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn insert_key(&self, key: &StoredKey) -> Result<bool, StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        let taken: Option<String> = query_scalar("SELECT id FROM access_keys WHERE name = $1 AND revoked_at IS NULL")
            .bind(key.name.as_str())
            .fetch_optional(&mut transaction)
            .await?;
        if taken.is_some() {
            return Ok(false);
        }
        let per_day = key.per_day.map(|most| signed("per_day", most)).transpose()?;
        query(
            "INSERT INTO access_keys (id, name, scope, digest, per_minute, per_day, created_at, expires_at) \
             VALUES ($1, $2, $3, $4, $5, $6, $7, $8)",
        )
        .bind(key.id.as_str())
        .bind(key.name.as_str())
        .bind(key.scope.as_str())
        .bind(key.digest.as_str())
        .bind(key.per_minute.map(i64::from))
        .bind(per_day)
        .bind(key.created_at.as_microsecond())
        .bind(key.expires_at.map(Timestamp::as_microsecond))
        .execute(&mut transaction)
        .await?;
        for network in &key.networks {
            query("INSERT INTO access_key_networks (access_key, network) VALUES ($1, $2)")
                .bind(key.id.as_str())
                .bind(network.as_str())
                .execute(&mut transaction)
                .await?;
        }
        self.commit(transaction).await?;
        Ok(true)
    }

    /// Revokes the key that has this id, or has this name and is not revoked; none when there is no such key. A key that was
    /// revoked before stays so.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn revoke_key(&self, which: &str, at: Timestamp) -> Result<Option<StoredKey>, StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        let id: Option<String> =
            query_scalar("SELECT id FROM access_keys WHERE id = $1 OR (name = $1 AND revoked_at IS NULL)")
                .bind(which)
                .fetch_optional(&mut transaction)
                .await?;
        let Some(id) = id else { return Ok(None) };
        query("UPDATE access_keys SET revoked_at = $2 WHERE id = $1 AND revoked_at IS NULL")
            .bind(id.as_str())
            .bind(at.as_microsecond())
            .execute(&mut transaction)
            .await?;
        let key = find(&mut transaction, &id).await?;
        self.commit(transaction).await?;
        Ok(key)
    }

    /// Every key, oldest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_keys(&self) -> Result<Vec<StoredKey>, StoreError> {
        let mut connection = self.reader().await?;
        let rows: Vec<KeyRow> = query(
            "SELECT id, name, scope, digest, per_minute, per_day, created_at, expires_at, last_used_at, revoked_at \
             FROM access_keys ORDER BY created_at, id",
        )
        .fetch_all(&mut connection)
        .await?;
        let mut keys = Vec::with_capacity(rows.len());
        for row in rows {
            keys.push(stored(&mut connection, row).await?);
        }
        Ok(keys)
    }

    /// The key with this id, and its requests on `day`.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_key(&self, id: &str, day: i64) -> Result<Option<(StoredKey, u64)>, StoreError> {
        let mut connection = self.reader().await?;
        let Some(key) = find(&mut connection, id).await? else { return Ok(None) };
        let requests: Option<i64> =
            query_scalar("SELECT requests FROM access_key_days WHERE access_key = $1 AND day = $2")
                .bind(id)
                .bind(day)
                .fetch_optional(&mut connection)
                .await?;
        Ok(Some((key, unsigned("requests", requests.unwrap_or(0))?)))
    }

    /// Adds what keys have used; counts of earlier days are dropped.
    ///
    /// # Errors
    /// When the database fails; then nothing was added.
    pub async fn save_uses(&self, uses: &[KeyUse]) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        for used in uses {
            // A key that is gone is not counted.
            query(
                "INSERT INTO access_key_days (access_key, day, requests) SELECT id, $2, $3 FROM access_keys WHERE id = $1 \
                 ON CONFLICT (access_key, day) DO UPDATE SET requests = access_key_days.requests + excluded.requests",
            )
            .bind(used.id.as_str())
            .bind(used.day)
            .bind(signed("requests", used.requests)?)
            .execute(&mut transaction)
            .await?;
            query("UPDATE access_keys SET last_used_at = $2 WHERE id = $1")
                .bind(used.id.as_str())
                .bind(used.last_used_at.as_microsecond())
                .execute(&mut transaction)
                .await?;
            query("DELETE FROM access_key_days WHERE access_key = $1 AND day < $2")
                .bind(used.id.as_str())
                .bind(used.day)
                .execute(&mut transaction)
                .await?;
        }
        self.commit(transaction).await
    }

    /// The network that a thing belongs to; none when it belongs to none, or there is no such thing.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn network_of(&self, thing: Belonging, id: Uuid) -> Result<Option<String>, StoreError> {
        let text = match thing {
            Belonging::Run => "SELECT network FROM runs WHERE id = $1 AND network IS NOT NULL",
            Belonging::Job => "SELECT network FROM jobs WHERE id = $1",
            Belonging::Backtest => "SELECT network FROM backtests WHERE id = $1",
        };
        Ok(query_scalar(text).bind(id.to_string()).fetch_optional(&mut self.reader().await?).await?)
    }
}

async fn find(connection: &mut Connection, id: &str) -> Result<Option<StoredKey>, StoreError> {
    let row: Option<KeyRow> = query(
        "SELECT id, name, scope, digest, per_minute, per_day, created_at, expires_at, last_used_at, revoked_at \
         FROM access_keys WHERE id = $1",
    )
    .bind(id)
    .fetch_optional(&mut *connection)
    .await?;
    match row {
        Some(row) => stored(connection, row).await.map(Some),
        None => Ok(None),
    }
}

async fn stored(connection: &mut Connection, row: KeyRow) -> Result<StoredKey, StoreError> {
    let mut networks: Vec<String> = query_scalar("SELECT network FROM access_key_networks WHERE access_key = $1")
        .bind(row.id.as_str())
        .fetch_all(connection)
        .await?;
    // By bytes, as they are looked up; a database may sort otherwise.
    networks.sort_unstable();
    let per_minute = row.per_minute.map(|most| u32::try_from(most).map_err(|_| corrupt("per_minute", most)));
    Ok(StoredKey {
        scope: row.scope.parse()?,
        per_minute: per_minute.transpose()?,
        per_day: row.per_day.map(|most| unsigned("per_day", most)).transpose()?,
        created_at: time(row.created_at)?,
        expires_at: row.expires_at.map(time).transpose()?,
        last_used_at: row.last_used_at.map(time).transpose()?,
        revoked_at: row.revoked_at.map(time).transpose()?,
        id: row.id,
        name: row.name,
        digest: row.digest,
        networks,
    })
}

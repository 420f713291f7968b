//! Access keys: made, listed and revoked; and held in memory while they are used.

mod meter;
mod ring;

use jiff::Timestamp;

use super::{NetworkName, Service, ServiceError, in_own_task};
use crate::config::DatabaseConfig;
use crate::credential::{Credential, masked};
use crate::store::{AuditFilter, AuditLine, Belonging, KeyScope, Store, StoreError, StoredKey};
pub use meter::{Allowance, Meter, Spent, Standing};
pub use ring::{KeyFault, KeyRing, LiveKey};

/// Most networks that a key is bound to.
const MOST_NETWORKS: usize = 1000;

/// What a new key is to allow.
#[derive(Debug, Clone)]
pub struct KeyTerms {
    /// What people call it.
    pub name: String,
    /// What it allows.
    pub scope: KeyScope,
    /// The networks it is bound to; none: not bound.
    pub networks: Vec<String>,
    /// Most requests a minute.
    pub per_minute: Option<u32>,
    /// Most requests a day (UTC).
    pub per_day: Option<u64>,
    /// When it ends by itself.
    pub expires_at: Option<Timestamp>,
}

/// Why there is no such key as asked for.
#[derive(Debug, thiserror::Error)]
pub enum KeyError {
    /// The terms make no sense.
    #[error("{0}")]
    Terms(String),
    /// A key that is not revoked has the name.
    #[error("a key named {0:?} is in use; revoke it first, or take another name")]
    NameTaken(String),
    /// There is no key of this id or name.
    #[error("no key has the id or, unrevoked, the name {0:?}; `keys list` has them all")]
    Missing(String),
    /// The database failed.
    #[error(transparent)]
    Store(#[from] StoreError),
}

/// The keys of a database, for whoever runs the service.
#[derive(Debug, Clone)]
pub struct KeyCabinet {
    store: Store,
}

impl KeyCabinet {
    /// Opens the database and brings its tables up to date.
    ///
    /// # Errors
    /// When that fails.
    pub async fn open(database: &DatabaseConfig) -> Result<Self, StoreError> {
        let store = Store::connect(database).await?;
        if database.migrate_on_start {
            store.migrate().await?;
        }
        Ok(Self { store })
    }

    /// Makes a key. This is the only time that it is told.
    ///
    /// # Errors
    /// When its terms make no sense, its name is taken, or the database fails.
    pub async fn create(&self, terms: KeyTerms) -> Result<(Credential, StoredKey), KeyError> {
        let credential = Credential::generate();
        let key = stored(terms, &credential)?;
        if self.store.insert_key(&key).await? { Ok((credential, key)) } else { Err(KeyError::NameTaken(key.name)) }
    }

    /// Revokes the key of this id or name, or this key.
    ///
    /// # Errors
    /// When there is none, or the database fails.
    pub async fn revoke(&self, which: &str) -> Result<StoredKey, KeyError> {
        let credential = Credential::parse(which);
        let which = credential.as_ref().map_or(which, Credential::id);
        let missing = || KeyError::Missing(which.to_owned());
        self.store.revoke_key(which, Timestamp::now()).await?.ok_or_else(missing)
    }

    /// Every key, oldest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list(&self) -> Result<Vec<StoredKey>, KeyError> {
        Ok(self.store.list_keys().await?)
    }

    /// Closes the database.
    pub async fn close(self) {
        self.store.close().await;
    }
}

fn stored(terms: KeyTerms, credential: &Credential) -> Result<StoredKey, KeyError> {
    let refused = |why: &str| KeyError::Terms(why.to_owned());
    let now = Timestamp::now();
    let KeyTerms { name, scope, mut networks, per_minute, per_day, expires_at } = terms;
    // Whoever reads a list of keys is not to be misled by one.
    NetworkName::new(&name).map_err(|_| {
        refused("a key's name is 1 to 100 letters, digits and . _ ~ - and begins with a letter or digit")
    })?;
    if masked(&name) != name {
        return Err(refused(
            "that is a key, not a name for one: keep keys out of sight, and name them for who uses them",
        ));
    }
    if per_day.is_some_and(|most| i64::try_from(most).is_err()) {
        return Err(refused(&format!("a limit of requests a day is at most {}; leave it out for none", i64::MAX)));
    }
    for network in &networks {
        NetworkName::new(network).map_err(|fault| refused(&format!("{network:?}: {fault}")))?;
    }
    networks.sort();
    networks.dedup();
    if networks.len() > MOST_NETWORKS {
        return Err(refused(&format!("a key is bound to at most {MOST_NETWORKS} networks")));
    }
    if scope == KeyScope::Admin && !networks.is_empty() {
        return Err(refused(
            "an admin key reads the trail of all writes, so it is not bound to networks; make it a write key",
        ));
    }
    if per_minute == Some(0) || per_day == Some(0) {
        return Err(refused("a limit of requests is at least 1; leave it out for none"));
    }
    if expires_at.is_some_and(|at| at <= now) {
        return Err(refused("the key would have expired already"));
    }
    Ok(StoredKey {
        id: credential.id().to_owned(),
        digest: credential.digest(),
        created_at: now,
        last_used_at: None,
        revoked_at: None,
        name,
        scope,
        networks,
        per_minute,
        per_day,
        expires_at,
    })
}

impl Service {
    /// The keys as they are used.
    pub fn keys(&self) -> &KeyRing {
        &self.keys
    }

    /// The network that a thing with an id of its own belongs to, if it does.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn network_of(&self, thing: Belonging, id: uuid::Uuid) -> Result<Option<String>, ServiceError> {
        Ok(self.store.network_of(thing, id).await?)
    }

    /// Lines of the trail of writes, newest first, and whether more follow.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn audit(&self, mut filter: AuditFilter) -> Result<(Vec<AuditLine>, bool), ServiceError> {
        let limit = filter.limit;
        filter.limit = limit.saturating_add(1);
        Ok(super::networks::cut(self.store.list_audit(&filter).await?, limit))
    }

    /// Deletes the lines of the trail written before `oldest`.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn sweep_audit(&self, oldest: Timestamp) -> Result<(), ServiceError> {
        let store = self.store.clone();
        in_own_task(async move { Ok(store.sweep_audit(oldest).await?) }).await
    }
}

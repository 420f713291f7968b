//! Keys that are in use, held in memory: looked up anew after [`UNCHECKED`], for they are made and revoked by another process.

use std::collections::HashMap;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, PoisonError, RwLock};
use std::time::{Duration, Instant};

use jiff::Timestamp;

use super::super::ServiceError;
use super::meter::{Meter, day_of};
use crate::credential::Credential;
use crate::store::{KeyUse, Store, StoreError, StoredKey};

/// Longest time for which a key is taken as it was when it was looked up.
const UNCHECKED: Duration = Duration::from_secs(1);
/// Most keys held: past it, those not used for longest make room, and the minute of each begins anew when it comes back.
const MOST_HELD: usize = 20_000;

/// The keys that are in use.
#[derive(Debug, Clone)]
pub struct KeyRing {
    inner: Arc<Inner>,
}

#[derive(Debug)]
struct Inner {
    store: Store,
    held: RwLock<HashMap<String, Arc<LiveKey>>>,
    begun: Instant,
}

/// A key in use.
#[derive(Debug)]
pub struct LiveKey {
    /// As stored.
    pub key: StoredKey,
    /// What it has used.
    pub meter: Arc<Meter>,
    /// When it was looked up, milliseconds since the beginning.
    checked: u64,
    used: AtomicU64,
}

/// Why a key opens nothing.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum KeyFault {
    /// There is no such key.
    Unknown,
    /// It was revoked.
    Revoked,
    /// Its time is over.
    Expired,
}

impl KeyRing {
    /// No keys yet.
    pub fn new(store: Store) -> Self {
        Self { inner: Arc::new(Inner { store, held: RwLock::default(), begun: Instant::now() }) }
    }

    /// A key that can be taken as it was looked up moments ago; none when it must be looked up, or opens nothing.
    pub fn held(&self, credential: &Credential) -> Option<Arc<LiveKey>> {
        let now = self.inner.now();
        let live = self.inner.find(credential.id())?;
        let fresh = now.saturating_sub(live.checked) < UNCHECKED.as_millis() as u64;
        if !fresh || live.check(credential).is_err() {
            return None;
        }
        live.used.store(now, Ordering::Relaxed);
        Some(live)
    }

    /// The key, looked up where that is needed.
    ///
    /// # Errors
    /// When the database fails; within, why the key opens nothing.
    pub async fn open(&self, credential: &Credential) -> Result<Result<Arc<LiveKey>, KeyFault>, ServiceError> {
        if let Some(live) = self.held(credential) {
            return Ok(Ok(live));
        }
        let (checked, day) = (self.inner.now(), day_of(Timestamp::now()));
        let Some((key, requests)) = self.inner.store.find_key(credential.id(), day).await? else {
            return Ok(Err(KeyFault::Unknown));
        };
        // Who does not know the secret changes nothing.
        if !credential.matches(&key.digest) {
            return Ok(Err(KeyFault::Unknown));
        }
        let live = self.inner.keep(key, checked);
        live.meter.knows(day, requests);
        Ok(live.check(credential).map(|()| live))
    }

    /// Stores what keys have used since the last time.
    ///
    /// # Errors
    /// When the database fails; it is stored with the next.
    pub async fn save_uses(&self) -> Result<(), StoreError> {
        let held: Vec<Arc<LiveKey>> = self.inner.read(|held| held.values().cloned().collect());
        let mut uses = Vec::new();
        for live in &held {
            if let Some((day, requests, last_used_at)) = live.meter.unsaved() {
                uses.push(KeyUse { id: live.key.id.clone(), day, requests, last_used_at });
            }
        }
        // In one order: two processes that store theirs wait for one another, never both.
        uses.sort_unstable_by(|a, b| a.id.cmp(&b.id));
        if uses.is_empty() {
            return Ok(());
        }
        self.inner.store.save_uses(&uses).await?;
        for used in &uses {
            if let Some(live) = self.inner.find(&used.id) {
                live.meter.saved(used.day, used.requests);
            }
        }
        Ok(())
    }
}

impl LiveKey {
    /// Whether the credential is this key's, and opens something.
    fn check(&self, credential: &Credential) -> Result<(), KeyFault> {
        if !credential.matches(&self.key.digest) {
            return Err(KeyFault::Unknown);
        }
        if self.key.revoked_at.is_some() {
            return Err(KeyFault::Revoked);
        }
        match self.key.expires_at {
            Some(at) if at <= Timestamp::now() => Err(KeyFault::Expired),
            _ => Ok(()),
        }
    }

    /// Whether it may know of a network.
    pub fn knows(&self, network: &str) -> bool {
        self.key.networks.is_empty() || self.key.networks.binary_search_by(|name| name.as_str().cmp(network)).is_ok()
    }

    /// Whether it is bound to networks.
    pub fn is_bound(&self) -> bool {
        !self.key.networks.is_empty()
    }
}

impl Inner {
    fn read<T>(&self, look: impl FnOnce(&HashMap<String, Arc<LiveKey>>) -> T) -> T {
        look(&self.held.read().unwrap_or_else(PoisonError::into_inner))
    }

    fn find(&self, id: &str) -> Option<Arc<LiveKey>> {
        self.read(|held| held.get(id).cloned())
    }

    /// Holds a key as it was looked up. What it has used goes on, unless its limits are others now.
    fn keep(&self, key: StoredKey, checked: u64) -> Arc<LiveKey> {
        let mut held = self.held.write().unwrap_or_else(PoisonError::into_inner);
        let same = |live: &&Arc<LiveKey>| (live.key.per_minute, live.key.per_day) == (key.per_minute, key.per_day);
        let meter = match held.get(&key.id).filter(same) {
            Some(live) => live.meter.clone(),
            None => Arc::new(Meter::new(key.per_minute, key.per_day)),
        };
        if held.len() >= MOST_HELD && !held.contains_key(&key.id) {
            let mut uses: Vec<u64> = held.values().map(|live| live.used.load(Ordering::Relaxed)).collect();
            uses.sort_unstable();
            let middle = uses.get(uses.len() / 2).copied().unwrap_or(u64::MAX);
            // What is not saved yet stays until it is.
            held.retain(|_, live| live.used.load(Ordering::Relaxed) > middle || live.meter.unsaved().is_some());
        }
        let live = Arc::new(LiveKey { key, meter, checked, used: checked.into() });
        held.insert(live.key.id.clone(), live.clone());
        live
    }

    /// Milliseconds since the beginning.
    fn now(&self) -> u64 {
        self.begun.elapsed().as_millis() as u64 // 2^64 ms are 584 million years
    }
}

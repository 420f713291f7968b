//! How the database stands: what is wrong with it, in one word, and what was found out about it last.

use std::fmt;
use std::sync::{Arc, Mutex, PoisonError};
use std::time::{Duration, Instant};

use super::file::DatabaseFile;
use super::{Store, StoreError};

/// How long a write that succeeded proves that the next one will: a probe then only takes the lock.
const PROOF_LASTS: Duration = Duration::from_secs(10);
/// Free space below which a disk that was full counts as full still, bytes: a small write may succeed where a large one does not.
const LEAST_FREE: u64 = 1 << 20;

/// What is wrong with the database, in one word.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum StoreFault {
    /// Another process holds the lock, or every connection was taken, for too long.
    Busy,
    /// The disk is full.
    Full,
    /// The file, or its file system, takes no writes.
    ReadOnly,
    /// The file was removed or replaced.
    Missing,
    /// The file is damaged.
    Corrupt,
    /// Anything else.
    Unavailable,
}

/// What is known of the database from one look to the next, shared by all that use it.
#[derive(Clone, Default)]
pub(super) struct Health(Arc<Mutex<Known>>);

#[derive(Default)]
struct Known {
    /// What the file's check found wrong.
    damage: Option<String>,
    /// The last write that succeeded.
    written_at: Option<Instant>,
    /// How the last write failed, if it did.
    failed: Option<StoreFault>,
}

impl fmt::Debug for Health {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let damaged = self.with(|known| known.damage.is_some());
        f.debug_struct("Health").field("damaged", &damaged).finish_non_exhaustive()
    }
}

impl Health {
    fn with<T>(&self, look: impl FnOnce(&mut Known) -> T) -> T {
        look(&mut self.0.lock().unwrap_or_else(PoisonError::into_inner))
    }

    /// Notes that the file is damaged: nothing is written into it from now on.
    pub(super) fn note_damage(&self, found: &str) {
        self.with(|known| known.damage = Some(found.to_owned()));
    }

    /// Notes how a write ended.
    pub(super) fn note_write(&self, outcome: Result<(), StoreFault>) {
        self.with(|known| match outcome {
            Ok(()) => (known.written_at, known.failed) = (Some(Instant::now()), None),
            Err(fault) => (known.written_at, known.failed) = (None, Some(fault)),
        });
    }

    /// Checks that the file was not found damaged.
    pub(super) fn check(&self) -> Result<(), StoreError> {
        match self.with(|known| known.damage.clone()) {
            None => Ok(()),
            Some(damage) => Err(StoreError::Damaged(damage)),
        }
    }

    /// Checks that a disk that was full has room again.
    pub(super) fn check_room(&self, file: &DatabaseFile) -> Result<(), StoreError> {
        if self.was_full() && file.free_bytes().is_some_and(|free| free < LEAST_FREE) {
            return Err(StoreError::Full(sqlx::Error::Io(std::io::ErrorKind::StorageFull.into())));
        }
        Ok(())
    }

    /// Whether a probe has to write to find out whether writing works.
    pub(super) fn needs_proof(&self) -> bool {
        self.with(|known| known.written_at.is_none_or(|at| at.elapsed() > PROOF_LASTS))
    }

    /// Whether the last write failed.
    pub(super) fn has_failed(&self) -> bool {
        self.with(|known| known.failed.is_some())
    }

    /// Whether the last write found the disk full.
    fn was_full(&self) -> bool {
        self.with(|known| known.failed == Some(StoreFault::Full))
    }
}

impl StoreError {
    /// What is wrong with the database, in one word.
    pub fn fault(&self) -> StoreFault {
        match self {
            Self::Busy(_) => StoreFault::Busy,
            Self::Full(_) => StoreFault::Full,
            Self::ReadOnly(_) => StoreFault::ReadOnly,
            Self::Gone { .. } => StoreFault::Missing,
            Self::Damaged(_) => StoreFault::Corrupt,
            _ => StoreFault::Unavailable,
        }
    }
}

impl Store {
    /// Checks that the file was not found damaged.
    ///
    /// # Errors
    /// When it was.
    pub fn check_sound(&self) -> Result<(), StoreError> {
        self.health.check()
    }
}

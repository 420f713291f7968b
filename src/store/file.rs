//! The database's file, watched: rows written into a file that was removed or replaced are on no disk anybody can find,
//! and a connection opened later would read whatever stands in its place.

use std::fs::{File, Metadata, TryLockError};
use std::path::{Path, PathBuf};

use super::StoreError;

/// The file that the connections have open.
#[derive(Debug, Clone)]
pub struct DatabaseFile {
    path: PathBuf,
    identity: Identity,
}

/// What tells one file from another under the same path.
type Identity = (u64, u64);

impl DatabaseFile {
    /// The file that stands at `path` now.
    ///
    /// # Errors
    /// When there is none.
    pub fn at(path: &Path) -> Result<Self, StoreError> {
        // The working folder may change, the file may not.
        let path = std::path::absolute(path).unwrap_or_else(|_| path.to_owned());
        let found = std::fs::metadata(&path).map_err(|_| StoreError::Gone { path: path.clone() })?;
        Ok(Self { identity: identity(&found), path })
    }

    /// Where it stands.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Keeps other services off the file until the answer is dropped, or the process ends however it ends: one would take the jobs
    /// of the other for those of a process that is gone.
    ///
    /// # Errors
    /// When a service has it; when no file can be made beside it.
    pub fn keep_alone(&self) -> Result<File, StoreError> {
        let mut name = self.path.as_os_str().to_owned();
        name.push("-serving");
        let fault = |reason: String| StoreError::Address { url: self.path.display().to_string(), reason };
        let held = File::options().create(true).truncate(false).write(true).open(PathBuf::from(name));
        let held = held.map_err(|error| fault(format!("no file can be made beside it: {error}")))?;
        match held.try_lock() {
            Err(TryLockError::WouldBlock) => Err(fault(
                "another service has this file; stop it, or give this one a file of its own. Several services share a PostgreSQL \
                 database (postgres://…)"
                    .to_owned(),
            )),
            // Where the file system knows no locks there is nothing to go by.
            _ => Ok(held),
        }
    }

    /// Checks that the file still stands at its path.
    ///
    /// # Errors
    /// When it is gone, or another stands there.
    pub fn check(&self) -> Result<(), StoreError> {
        match std::fs::metadata(&self.path) {
            Ok(found) if identity(&found) == self.identity => Ok(()),
            _ => Err(StoreError::Gone { path: self.path.clone() }),
        }
    }
}

impl DatabaseFile {
    /// Bytes free to this process on the file's disk, where that can be told.
    pub fn free_bytes(&self) -> Option<u64> {
        #[cfg(unix)]
        {
            let told = rustix::fs::statvfs(self.path.parent()?).ok()?;
            Some(told.f_bavail.saturating_mul(told.f_frsize))
        }
        #[cfg(not(unix))]
        None
    }
}

#[cfg(unix)]
fn identity(found: &Metadata) -> Identity {
    use std::os::unix::fs::MetadataExt;
    (found.dev(), found.ino())
}

/// Elsewhere an open file can be neither removed nor replaced: that it stands there is enough.
#[cfg(not(unix))]
fn identity(_found: &Metadata) -> Identity {
    (0, 0)
}

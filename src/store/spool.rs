//! Large bodies, kept in files beside the database until a job has read them.

use std::io;
use std::path::{Path, PathBuf};
use std::time::{Duration, SystemTime};

use tempfile::{NamedTempFile, TempPath};
use tokio::fs::File;
use tokio::io::{AsyncWriteExt, BufWriter};
use uuid::Uuid;

use super::{Store, StoreError};

/// Bytes gathered before they are written.
const BLOCK: usize = 1 << 18;

/// A body that is being received; its file goes when this is dropped.
#[derive(Debug)]
pub struct Upload {
    folder: PathBuf,
    path: TempPath,
    file: BufWriter<File>,
    bytes: u64,
}

impl Upload {
    /// Bytes received so far.
    pub fn bytes(&self) -> u64 {
        self.bytes
    }

    /// Receives more.
    ///
    /// # Errors
    /// When it cannot be written.
    pub async fn write(&mut self, bytes: &[u8]) -> Result<(), StoreError> {
        self.bytes += bytes.len() as u64;
        self.file.write_all(bytes).await.map_err(unusable)
    }

    /// Keeps the body for a job: on disk when this returns.
    ///
    /// # Errors
    /// When it cannot be written.
    pub async fn keep(mut self, job: Uuid) -> Result<(), StoreError> {
        self.file.flush().await.map_err(unusable)?;
        self.file.get_ref().sync_all().await.map_err(unusable)?;
        let (path, folder) = (self.path, self.folder);
        let kept = tokio::task::spawn_blocking(move || {
            path.persist(file_of(&folder, job)).map_err(|error| error.error)?;
            // The folder's entry must be on disk as well.
            std::fs::File::open(&folder)?.sync_all()
        });
        kept.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)
    }
}

impl Store {
    /// Begins to receive a body.
    ///
    /// # Errors
    /// When no file can be made beside the database.
    pub async fn begin_upload(&self) -> Result<Upload, StoreError> {
        self.file.check()?;
        let folder = self.spool_folder();
        let making = folder.clone();
        let made = tokio::task::spawn_blocking(move || {
            std::fs::create_dir_all(&making)?;
            NamedTempFile::with_prefix_in("upload-", &making)
        });
        let made = made.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)?;
        let (file, path) = made.into_parts();
        Ok(Upload { folder, path, file: BufWriter::with_capacity(BLOCK, File::from_std(file)), bytes: 0 })
    }

    /// Where the body of a job is kept.
    pub fn spooled(&self, job: Uuid) -> PathBuf {
        file_of(&self.spool_folder(), job)
    }

    /// Removes the files of jobs that have ended, and those of uploads that were given up, which are older than `age`.
    ///
    /// # Errors
    /// When the database fails, or the folder cannot be read.
    pub async fn sweep_spool(&self, age: Duration) -> Result<(), StoreError> {
        let needed: Vec<PathBuf> = self.live_jobs().await?.into_iter().map(|(job, _)| self.spooled(job)).collect();
        let folder = self.spool_folder();
        let swept = tokio::task::spawn_blocking(move || sweep(&folder, &needed, age));
        swept.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)
    }

    pub(super) fn spool_folder(&self) -> PathBuf {
        let mut name = self.file.path().as_os_str().to_owned();
        name.push("-jobs");
        name.into()
    }
}

fn sweep(folder: &Path, needed: &[PathBuf], age: Duration) -> io::Result<()> {
    let entries = match std::fs::read_dir(folder) {
        Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(()),
        entries => entries?,
    };
    for entry in entries {
        let path = entry?.path();
        let old = std::fs::metadata(&path)
            .and_then(|found| found.modified())
            .is_ok_and(|modified| SystemTime::now().duration_since(modified).is_ok_and(|since| since >= age));
        if old && !needed.contains(&path) {
            std::fs::remove_file(&path)?;
        }
    }
    Ok(())
}

fn file_of(folder: &Path, job: Uuid) -> PathBuf {
    folder.join(format!("{job}.links"))
}

fn unusable(error: io::Error) -> StoreError {
    sqlx::Error::Io(error).into()
}

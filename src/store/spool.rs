//! Large bodies, kept until a job has read them: in files beside a database file, in rows of a server, where every replica finds
//! them.

use std::io;
use std::path::{Path, PathBuf};
use std::time::{Duration, SystemTime};

use jiff::Timestamp;
use tempfile::{NamedTempFile, TempPath};
use tokio::fs::File;
use tokio::io::{AsyncWriteExt, BufWriter};
use uuid::Uuid;

use super::statement::{query, query_scalar};
use super::writes::Scope;
use super::{Home, Store, StoreError};

/// Bytes gathered before they are written to a file, and to a row.
const BLOCK: usize = 1 << 18;
const PART: usize = 1 << 20;

/// A body that is being received; what was kept of it goes when this is dropped.
#[derive(Debug)]
pub struct Upload {
    bytes: u64,
    to: To,
}

#[derive(Debug)]
enum To {
    File { folder: PathBuf, path: TempPath, file: BufWriter<File> },
    Rows(Rows),
}

#[derive(Debug)]
struct Rows {
    store: Store,
    upload: Uuid,
    parts: i64,
    block: Vec<u8>,
    kept: bool,
}

/// The body of a job, as a file.
#[derive(Debug)]
pub struct Spooled {
    path: PathBuf,
    /// A copy of rows, which goes with this.
    _copy: Option<TempPath>,
}

impl Spooled {
    /// Where it stands.
    pub fn path(&self) -> &Path {
        &self.path
    }
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
        match &mut self.to {
            To::File { file, .. } => file.write_all(bytes).await.map_err(unusable),
            To::Rows(rows) => rows.write(bytes).await,
        }
    }

    /// Keeps the body for a job: on disk when this returns.
    ///
    /// # Errors
    /// When it cannot be written.
    pub async fn keep(self, job: Uuid) -> Result<(), StoreError> {
        let (folder, path, mut file) = match self.to {
            To::File { folder, path, file } => (folder, path, file),
            To::Rows(rows) => return rows.keep(job).await,
        };
        file.flush().await.map_err(unusable)?;
        file.get_ref().sync_all().await.map_err(unusable)?;
        let kept = tokio::task::spawn_blocking(move || {
            path.persist(file_of(&folder, job)).map_err(|error| error.error)?;
            // The folder's entry must be on disk as well.
            std::fs::File::open(&folder)?.sync_all()
        });
        kept.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)
    }
}

impl Rows {
    async fn write(&mut self, mut bytes: &[u8]) -> Result<(), StoreError> {
        while !bytes.is_empty() {
            let (fits, rest) = bytes.split_at(bytes.len().min(PART.saturating_sub(self.block.len())));
            self.block.extend_from_slice(fits);
            bytes = rest;
            if self.block.len() >= PART {
                self.flush().await?;
            }
        }
        Ok(())
    }

    async fn flush(&mut self) -> Result<(), StoreError> {
        let mut transaction = self.store.begin(Scope::Own).await?;
        query("INSERT INTO spooled_parts (upload, part, created_at, bytes) VALUES ($1, $2, $3, $4)")
            .bind(self.upload.to_string())
            .bind(self.parts)
            .bind(Timestamp::now().as_microsecond())
            .bind(self.block.as_slice())
            .execute(&mut transaction)
            .await?;
        self.store.commit(transaction).await?;
        self.parts += 1;
        self.block.clear();
        Ok(())
    }

    async fn keep(mut self, job: Uuid) -> Result<(), StoreError> {
        if !self.block.is_empty() || self.parts == 0 {
            self.flush().await?;
        }
        let mut transaction = self.store.begin(Scope::Own).await?;
        query("UPDATE spooled_parts SET upload = $2 WHERE upload = $1")
            .bind(self.upload.to_string())
            .bind(job.to_string())
            .execute(&mut transaction)
            .await?;
        self.store.commit(transaction).await?;
        self.kept = true;
        Ok(())
    }
}

impl Drop for Rows {
    fn drop(&mut self) {
        if self.kept || self.parts == 0 {
            return;
        }
        let (store, upload) = (self.store.clone(), self.upload);
        // What cannot be dropped now is swept away later.
        if let Ok(runtime) = tokio::runtime::Handle::try_current() {
            runtime.spawn(async move { store.drop_spooled(upload).await });
        }
    }
}

impl Store {
    /// Begins to receive a body.
    ///
    /// # Errors
    /// When no file can be made beside the database.
    pub async fn begin_upload(&self) -> Result<Upload, StoreError> {
        let Home::Sqlite { file, .. } = &self.home else {
            let (store, upload, block) = (self.clone(), Uuid::now_v7(), Vec::new());
            return Ok(Upload { bytes: 0, to: To::Rows(Rows { store, upload, parts: 0, block, kept: false }) });
        };
        file.check()?;
        let folder = spool_folder(file.path());
        let making = folder.clone();
        let made = tokio::task::spawn_blocking(move || {
            std::fs::create_dir_all(&making)?;
            NamedTempFile::with_prefix_in("upload-", &making)
        });
        let made = made.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)?;
        let (file, path) = made.into_parts();
        let file = BufWriter::with_capacity(BLOCK, File::from_std(file));
        Ok(Upload { bytes: 0, to: To::File { folder, path, file } })
    }

    /// The body of a job, as a file.
    ///
    /// # Errors
    /// When the database fails, or no file can be written.
    pub async fn spooled(&self, job: Uuid) -> Result<Spooled, StoreError> {
        if let Home::Sqlite { file, .. } = &self.home {
            return Ok(Spooled { path: file_of(&spool_folder(file.path()), job), _copy: None });
        }
        let made = tokio::task::spawn_blocking(NamedTempFile::new).await.map_err(io::Error::other);
        let (file, path) = made.and_then(|made| made).map_err(unusable)?.into_parts();
        let mut file = BufWriter::with_capacity(BLOCK, File::from_std(file));
        for part in 0.. {
            // One at a time: a list is larger than memory may be.
            let bytes: Option<Vec<u8>> =
                query_scalar("SELECT bytes FROM spooled_parts WHERE upload = $1 AND part = $2")
                    .bind(job.to_string())
                    .bind(part)
                    .fetch_optional(&mut self.reader().await?)
                    .await?;
            let Some(bytes) = bytes else { break };
            file.write_all(&bytes).await.map_err(unusable)?;
        }
        file.flush().await.map_err(unusable)?;
        Ok(Spooled { path: path.to_path_buf(), _copy: Some(path) })
    }

    /// Drops the body of a job that has ended or was never taken on; what cannot be dropped now is swept away later.
    pub async fn drop_spooled(&self, job: Uuid) {
        let dropped = match &self.home {
            Home::Sqlite { file, .. } => match tokio::fs::remove_file(file_of(&spool_folder(file.path()), job)).await {
                Err(error) if error.kind() != io::ErrorKind::NotFound => Err(unusable(error)),
                _ => Ok(()),
            },
            Home::Postgres { .. } => self.drop_parts(job).await,
        };
        if let Err(error) = dropped {
            tracing::warn!(%job, %error, "a link list that is needed no more could not be removed");
        }
    }

    async fn drop_parts(&self, job: Uuid) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        // Whoever was slower than the claim may have lost the job to another process, which reads the list now.
        query(
            "DELETE FROM spooled_parts WHERE upload = $1 \
             AND NOT EXISTS (SELECT 1 FROM jobs WHERE id = $1 AND state IN ('waiting', 'running'))",
        )
        .bind(job.to_string())
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await
    }

    /// Removes the bodies of jobs that have ended, and those of uploads that were given up, which are older than `age`.
    ///
    /// # Errors
    /// When the database fails, or the folder cannot be read.
    pub async fn sweep_spool(&self, age: Duration) -> Result<(), StoreError> {
        let Home::Sqlite { file, .. } = &self.home else { return self.sweep_parts(age).await };
        let folder = spool_folder(file.path());
        let live: Vec<String> = query_scalar("SELECT id FROM jobs WHERE state IN ('waiting', 'running')")
            .fetch_all(&mut self.reader().await?)
            .await?;
        let swept = tokio::task::spawn_blocking(move || {
            let needed: Vec<PathBuf> = live.iter().map(|job| folder.join(format!("{job}.links"))).collect();
            sweep(&folder, &needed, age)
        });
        swept.await.map_err(io::Error::other).and_then(|outcome| outcome).map_err(unusable)
    }

    async fn sweep_parts(&self, age: Duration) -> Result<(), StoreError> {
        let before =
            Timestamp::now().as_microsecond().saturating_sub(i64::try_from(age.as_micros()).unwrap_or(i64::MAX));
        let mut transaction = self.begin(Scope::Own).await?;
        query(
            "DELETE FROM spooled_parts WHERE created_at < $1 AND upload NOT IN \
             (SELECT id FROM jobs WHERE state IN ('waiting', 'running'))",
        )
        .bind(before)
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await
    }
}

pub(super) fn spool_folder(database: &Path) -> PathBuf {
    let mut name = database.as_os_str().to_owned();
    name.push("-jobs");
    name.into()
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

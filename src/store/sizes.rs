//! How large the database is.

use std::path::Path;

use super::spool::spool_folder;
use super::statement::query;
use super::{Home, Store, StoreError};

/// How large the database is, bytes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Sizes {
    /// The database file.
    pub database_bytes: u64,
    /// Its write-ahead log.
    pub log_bytes: u64,
    /// Pages of the file that hold nothing: they are filled before the file grows.
    pub free_bytes: u64,
    /// Link lists that lie beside it.
    pub spool_bytes: u64,
    /// Free space on its disk, where that can be told.
    pub disk_free_bytes: Option<u64>,
}

impl Store {
    /// How large the database is.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn sizes(&self) -> Result<Sizes, StoreError> {
        let Home::Sqlite { file, .. } = &self.home else { return self.server_sizes().await };
        let (free, page): (i64, i64) =
            query("SELECT freelist_count, page_size FROM pragma_freelist_count, pragma_page_size")
                .fetch_one(&mut self.reader().await?)
                .await?;
        let (file, spool) = (file.clone(), spool_folder(file.path()));
        let measured = tokio::task::spawn_blocking(move || {
            let mut log = file.path().as_os_str().to_owned();
            log.push("-wal");
            Sizes {
                database_bytes: file_bytes(file.path()),
                log_bytes: file_bytes(Path::new(&log)),
                free_bytes: free.saturating_mul(page).max(0).unsigned_abs(),
                spool_bytes: folder_bytes(&spool),
                disk_free_bytes: file.free_bytes(),
            }
        });
        measured.await.map_err(|error| sqlx::Error::Io(std::io::Error::other(error)).into())
    }

    /// Of a server: the database and the link lists in it. Its log and its disk are its own affair.
    async fn server_sizes(&self) -> Result<Sizes, StoreError> {
        let (database, spool): (i64, i64) = query(
            "SELECT pg_database_size(current_database()), \
             CAST((SELECT coalesce(sum(length(bytes)), 0) FROM spooled_parts) AS BIGINT)",
        )
        .fetch_one(&mut self.reader().await?)
        .await?;
        let bytes = |count: i64| count.max(0).unsigned_abs();
        Ok(Sizes {
            database_bytes: bytes(database),
            log_bytes: 0,
            free_bytes: 0,
            spool_bytes: bytes(spool),
            disk_free_bytes: None,
        })
    }

    /// Rows of the main tables. Cost: one reading of an index each.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn row_counts(&self) -> Result<Vec<(String, u64)>, StoreError> {
        let counts: Vec<(String, i64)> = query(
            "SELECT 'runs', count(*) FROM runs UNION ALL SELECT 'networks', count(*) FROM networks \
             UNION ALL SELECT 'snapshots', count(*) FROM snapshots UNION ALL SELECT 'jobs', count(*) FROM jobs \
             UNION ALL SELECT 'accounts', count(*) FROM accounts UNION ALL SELECT 'backtests', count(*) FROM backtests",
        )
        .fetch_all(&mut self.reader().await?)
        .await?;
        Ok(counts.into_iter().map(|(table, rows)| (table, rows.max(0).unsigned_abs())).collect())
    }
}

/// A file that is not there has no bytes.
fn file_bytes(path: &Path) -> u64 {
    std::fs::metadata(path).map_or(0, |found| found.len())
}

fn folder_bytes(folder: &Path) -> u64 {
    let entries = std::fs::read_dir(folder).into_iter().flatten().flatten();
    entries.filter_map(|entry| Some(entry.metadata().ok()?.len())).sum()
}

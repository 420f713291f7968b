//! Whether the database file is sound: its pages and indexes, and that rows refer to rows that are there.

use std::time::{Duration, Instant};

use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use sqlx::{Connection, FromRow};

use super::{Home, Store, StoreError};

/// Faults told of one file: the first ones say what to do.
const MOST_FAULTS: usize = 5;
/// Steps of SQLite's machine between two looks at the clock.
const STEPS: i32 = 1000;
/// The result code of a statement that was stopped.
const SQLITE_INTERRUPT: &str = "9";

/// What a check found.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Checked {
    /// Whether all of the file was looked at.
    pub complete: bool,
    /// What is wrong; empty when nothing was found.
    pub faults: Vec<String>,
    /// How long it took.
    pub elapsed: Duration,
}

#[derive(FromRow)]
struct Dangling {
    table: String,
    parent: String,
}

impl Store {
    /// Looks for damage in the file for at most `limit`: its structure (`PRAGMA quick_check`), then references between rows
    /// (`PRAGMA foreign_key_check`). What is found stops all further writes. Cost: one reading of the file. None of a server, which looks
    /// after its own pages.
    ///
    /// # Errors
    /// When the file cannot be read; damage that is found is no error of this.
    pub async fn check_integrity(&self, limit: Duration) -> Result<Option<Checked>, StoreError> {
        let Home::Sqlite { read, file, .. } = &self.home else { return Ok(None) };
        file.check()?;
        // A connection of its own: its time limit must not meet anybody else.
        let checked = check_file(&read.connect_options(), Depth::Quick, Some(limit)).await?;
        if !checked.faults.is_empty() {
            self.health.note_damage(&checked.faults.join("; "));
        }
        Ok(Some(checked))
    }
}

/// How closely to look.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Depth {
    /// All but whether indexes agree with their tables.
    Quick,
    /// Everything.
    Full,
}

/// Looks for damage in a file, for at most `limit`.
pub(super) async fn check_file(
    options: &SqliteConnectOptions,
    depth: Depth,
    limit: Option<Duration>,
) -> Result<Checked, StoreError> {
    let started = Instant::now();
    let mut connection = SqliteConnection::connect_with(options).await?;
    if let Some(limit) = limit {
        let mut handle = connection.lock_handle().await?;
        handle.set_progress_handler(STEPS, move || started.elapsed() < limit);
    }
    let looked = look(&mut connection, depth).await;
    // Nothing was written: whether it closes well says nothing.
    let _ = connection.close().await;
    let (complete, faults) = match looked {
        Ok(faults) => (true, faults),
        Err(sqlx::Error::Database(error)) if error.code().as_deref() == Some(SQLITE_INTERRUPT) => (false, Vec::new()),
        Err(error) => match StoreError::from(error) {
            StoreError::Damaged(found) => (true, vec![found]),
            other => return Err(other),
        },
    };
    Ok(Checked { complete, faults, elapsed: started.elapsed() })
}

async fn look(connection: &mut SqliteConnection, depth: Depth) -> Result<Vec<String>, sqlx::Error> {
    let text = match depth {
        Depth::Quick => "PRAGMA quick_check(5)",
        Depth::Full => "PRAGMA integrity_check(5)",
    };
    let told: Vec<String> = sqlx::query_scalar(text).fetch_all(&mut *connection).await?;
    let faults: Vec<String> =
        told.into_iter().filter(|line| line != "ok").map(|line| line.replace('\n', " ")).take(MOST_FAULTS).collect();
    if !faults.is_empty() {
        return Ok(faults);
    }
    let dangling: Vec<Dangling> = sqlx::query_as("SELECT \"table\", parent FROM pragma_foreign_key_check LIMIT 5")
        .fetch_all(&mut *connection)
        .await?;
    Ok(dangling
        .into_iter()
        .map(|row| format!("a row of {} refers to one of {} that is not there", row.table, row.parent))
        .collect())
}

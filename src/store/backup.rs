//! Copies of the database file: made while a service runs, and put back.

use std::fmt;
use std::fs::File;
use std::io;
use std::path::{Path, PathBuf};
use std::str::FromStr;
use std::time::Duration;

use jiff::Timestamp;
use sqlx::Connection;
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection, SqliteJournalMode, SqliteLockingMode};
use tempfile::{NamedTempFile, TempPath};

use super::StoreError;
use super::connect::{address_fault, known_migrations};
use super::integrity::{Depth, check_file};
use crate::config::DatabaseConfig;

/// How long the lock of a file is waited for that is about to be replaced: whoever runs on it keeps it.
const LOCK_WAIT: Duration = Duration::from_millis(500);

/// A backup that was made.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct BackupReport {
    /// Its size, bytes.
    pub bytes: u64,
    /// Runs in it.
    pub runs: u64,
    /// Tracked networks in it.
    pub networks: u64,
    /// Link lists that were waiting or at work: their bodies are not in it.
    pub open_lists: u64,
}

/// A backup that was put back.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RestoreReport {
    /// What the backup holds.
    pub holds: BackupReport,
    /// Where the file stands now that stood there before.
    pub aside: Option<PathBuf>,
    /// Whether that file is damaged, so that nothing told whether a service has it open.
    pub was_damaged: bool,
}

/// Why a backup was not made or not put back. Nothing was changed then.
#[derive(Debug)]
pub enum BackupError {
    /// The database is a server's, which has tools of its own.
    Server,
    /// Something stands where the backup is to go.
    Taken(PathBuf),
    /// There is no such file.
    NoFile(PathBuf),
    /// The file is no sound backup; what is wrong with it.
    NotSound(PathBuf, String),
    /// A service, or another program, has the database open.
    InUse(PathBuf),
    /// A file could not be written.
    File(PathBuf, io::Error),
    /// The database failed.
    Store(StoreError),
}

impl fmt::Display for BackupError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Server => write!(
                f,
                "the database is a PostgreSQL server's, which has tools of its own; back up with\n  \
                 pg_dump --format=custom --file=FILE \"$TAILCAST_DATABASE_URL\"\nand restore, with every replica stopped, with\n  \
                 pg_restore --clean --if-exists --single-transaction --dbname=\"$TAILCAST_DATABASE_URL\" FILE"
            ),
            Self::Taken(path) => write!(
                f,
                "{} is there already, or belongs to the database itself; name another file, or add --replace where an older backup is to go",
                path.display()
            ),
            Self::NoFile(path) => write!(f, "{} is not there, or is no file", path.display()),
            Self::NotSound(path, found) => write!(f, "{} cannot be used: {found}", path.display()),
            Self::InUse(path) => {
                write!(f, "{} is in use; stop the service (or other program) that has it open first", path.display())
            }
            Self::File(path, error) => write!(f, "{}: {error}", path.display()),
            Self::Store(error) => error.fmt(f),
        }
    }
}

impl From<sqlx::Error> for BackupError {
    fn from(error: sqlx::Error) -> Self {
        Self::Store(error.into())
    }
}

/// Copies the database into `target`, whether or not a service runs on it: all that was acknowledged before is in the copy, and of
/// what is written meanwhile whole transactions or nothing. The copy is compact, checked, and on disk when this returns.
///
/// # Errors
/// [`BackupError`]; `target` is as it was then.
pub async fn back_up(config: &DatabaseConfig, target: &Path, replace: bool) -> Result<BackupReport, BackupError> {
    let options = source(config)?;
    let database = options.get_filename();
    if !database.is_file() {
        return Err(BackupError::NoFile(database.to_owned()));
    }
    // Nothing but a plain file is replaced, and none of those that the database consists of.
    let companion = |suffix: &str| same_place(&beside(database, suffix), target);
    let own = same_file(database, target) || ["-wal", "-shm", "-journal", "-serving"].into_iter().any(companion);
    let plain = std::fs::symlink_metadata(target).map_or(true, |found| found.is_file());
    if own || !plain || (target.exists() && !replace) {
        return Err(BackupError::Taken(target.to_owned()));
    }
    let part = part_beside(target)?;
    let mut connection = SqliteConnection::connect_with(&options.read_only(true)).await?;
    sqlx::query("VACUUM INTO $1").bind(text(&part)?).execute(&mut connection).await?;
    let _ = connection.close().await;
    let report = examine(&part).await?;
    sync(&part)?;
    let put = if replace { part.persist(target) } else { part.persist_noclobber(target) };
    put.map_err(|error| match error.error.kind() {
        io::ErrorKind::AlreadyExists => BackupError::Taken(target.to_owned()),
        _ => BackupError::File(target.to_owned(), error.error),
    })?;
    sync(folder_of(target))?;
    Ok(report)
}

/// Puts a backup in the database's place and keeps what stood there under another name. The file is examined first, and the
/// database's path leads to the old or the new file at every moment.
///
/// # Errors
/// [`BackupError`], above all when a service has the database open.
pub async fn restore(config: &DatabaseConfig, backup: &Path) -> Result<RestoreReport, BackupError> {
    let options = source(config)?;
    let database = options.get_filename().to_owned();
    if !backup.is_file() {
        return Err(BackupError::NoFile(backup.to_owned()));
    }
    if std::fs::metadata(beside(backup, "-wal")).is_ok_and(|log| log.len() > 0) {
        let found = "a write-ahead log lies beside it, so it is a database in use, and not all of it is in the one file; make a \
                     backup of it";
        return Err(BackupError::NotSound(backup.to_owned(), found.into()));
    }
    let part = part_beside(&database)?;
    std::fs::copy(backup, &part).map_err(|error| BackupError::File(backup.to_owned(), error))?;
    let holds = examine(&part).await.map_err(|error| match error {
        BackupError::NotSound(_, found) => BackupError::NotSound(backup.to_owned(), found),
        other => other,
    })?;
    take_owner(&database, &part)?;
    sync(&part)?;
    // Held until the new file stands in its place: a service that is started meanwhile waits for it.
    let (lock, was_damaged) = lock(&options).await?;
    let mut aside = None;
    if database.exists() {
        let kept = beside(&database, &format!("-before-{}", Timestamp::now().strftime("%Y%m%dT%H%M%SZ")));
        std::fs::hard_link(&database, &kept).map_err(|error| BackupError::File(kept.clone(), error))?;
        aside = Some(kept);
    }
    // A log that could not be folded into its file belongs to that file, and would be read into the new one.
    let log = beside(&database, "-wal");
    if let (true, Some(kept)) = (log.exists(), &aside) {
        std::fs::rename(&log, beside(kept, "-wal")).map_err(|error| BackupError::File(log, error))?;
    }
    // What tells processes where in the log they are; made anew from it.
    match std::fs::remove_file(beside(&database, "-shm")) {
        Err(error) if error.kind() != io::ErrorKind::NotFound => {
            return Err(BackupError::File(beside(&database, "-shm"), error));
        }
        _ => {}
    }
    part.persist(&database).map_err(|error| BackupError::File(database.clone(), error.error))?;
    sync(folder_of(&database))?;
    if let Some(lock) = lock {
        let _ = lock.close().await;
    }
    Ok(RestoreReport { holds, aside, was_damaged })
}

/// Gives a file the owner and the permissions of the one it is to replace: the service may run as another user than this command.
fn take_owner(replaced: &Path, file: &Path) -> Result<(), BackupError> {
    let Ok(found) = std::fs::metadata(replaced) else { return Ok(()) };
    let given = std::fs::set_permissions(file, found.permissions());
    #[cfg(unix)]
    let given = given.and_then(|()| {
        use std::os::unix::fs::{MetadataExt, chown};
        chown(file, Some(found.uid()), Some(found.gid()))
    });
    given.map_err(|error| BackupError::File(replaced.to_owned(), error))
}

/// Where the database lies; nothing is made there.
fn source(config: &DatabaseConfig) -> Result<SqliteConnectOptions, BackupError> {
    if config.url.starts_with("postgres:") || config.url.starts_with("postgresql:") {
        return Err(BackupError::Server);
    }
    let options = SqliteConnectOptions::from_str(&config.url)
        .map_err(|error| BackupError::Store(address_fault(config, error.to_string())))?;
    Ok(options.create_if_missing(false).busy_timeout(Duration::from_millis(config.busy_timeout_ms)))
}

/// Takes the file's lock, which a service would hold, with its log folded into it; nothing where there is no file, and nothing
/// of one that is damaged.
async fn lock(options: &SqliteConnectOptions) -> Result<(Option<SqliteConnection>, bool), BackupError> {
    let path = options.get_filename();
    if !path.exists() {
        return Ok((None, false));
    }
    let alone = options.clone().busy_timeout(LOCK_WAIT).locking_mode(SqliteLockingMode::Exclusive);
    let opened = SqliteConnection::connect_with(&alone.journal_mode(SqliteJournalMode::Delete)).await;
    let locked = match opened {
        Ok(mut connection) => sqlx::query("BEGIN EXCLUSIVE").execute(&mut connection).await.map(|_done| connection),
        Err(error) => Err(error),
    };
    match locked.map_err(StoreError::from) {
        Ok(connection) => Ok((Some(connection), false)),
        Err(StoreError::Busy(_)) => Err(BackupError::InUse(path.to_owned())),
        Err(StoreError::Damaged(_)) => Ok((None, true)),
        Err(error) => Err(BackupError::Store(error)),
    }
}

/// What a copy holds, when it is sound and of a version that is known.
async fn examine(path: &Path) -> Result<BackupReport, BackupError> {
    let unsound = |found: String| BackupError::NotSound(path.to_owned(), found);
    let options = SqliteConnectOptions::new().filename(path).read_only(true);
    let checked = check_file(&options, Depth::Full, None).await.map_err(BackupError::Store)?;
    if !checked.faults.is_empty() {
        return Err(unsound(checked.faults.join("; ")));
    }
    let mut connection = SqliteConnection::connect_with(&options).await?;
    let migrations: Result<Vec<(i64, bool, Vec<u8>)>, _> =
        sqlx::query_as("SELECT version, success, checksum FROM _sqlx_migrations ORDER BY version")
            .fetch_all(&mut connection)
            .await;
    let Some(migrations) = migrations.ok().filter(|found| !found.is_empty()) else {
        return Err(unsound("it is no database of this service".into()));
    };
    let mut known = known_migrations();
    for (version, success, checksum) in &migrations {
        match known.next() {
            None => return Err(unsound(format!("it was written by a newer version (tables of version {version})"))),
            Some((next, _)) if next != *version => {
                return Err(unsound(format!("its record of migrations has gaps ({version} where {next} comes next)")));
            }
            Some((_, known)) if !success || known != checksum.as_slice() => {
                return Err(unsound(format!("its tables are none of a released version (at {version})")));
            }
            Some(_) => {}
        }
    }
    // Earlier versions have not all of the tables.
    let mut count = async |text: &'static str| -> u64 {
        let rows: Result<i64, _> = sqlx::query_scalar(text).fetch_one(&mut connection).await;
        rows.map_or(0, |rows| rows.max(0).unsigned_abs())
    };
    let runs = count("SELECT count(*) FROM runs").await;
    let networks = count("SELECT count(*) FROM networks").await;
    let open_lists =
        count("SELECT count(*) FROM jobs WHERE kind = 'link_list' AND state IN ('waiting', 'running')").await;
    let _ = connection.close().await;
    let bytes = std::fs::metadata(path).map_err(|error| BackupError::File(path.to_owned(), error))?.len();
    Ok(BackupReport { bytes, runs, networks, open_lists })
}

/// A file in the folder of `path` that goes when it is not put in its place.
fn part_beside(path: &Path) -> Result<TempPath, BackupError> {
    let made = NamedTempFile::with_prefix_in("part-", folder_of(path));
    Ok(made.map_err(|error| BackupError::File(path.to_owned(), error))?.into_temp_path())
}

fn folder_of(path: &Path) -> &Path {
    path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."))
}

fn beside(path: &Path, suffix: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(suffix);
    name.into()
}

fn same_file(a: &Path, b: &Path) -> bool {
    matches!((a.canonicalize(), b.canonicalize()), (Ok(a), Ok(b)) if a == b)
}

/// Whether two paths lead to the same name in the same folder, there or not.
fn same_place(a: &Path, b: &Path) -> bool {
    a.file_name() == b.file_name() && same_file(folder_of(a), folder_of(b))
}

fn text(path: &Path) -> Result<&str, BackupError> {
    path.to_str().ok_or_else(|| BackupError::File(path.to_owned(), io::Error::other("its name is not UTF-8")))
}

/// Has a file, or the entries of a folder, on disk.
fn sync(path: &Path) -> Result<(), BackupError> {
    File::open(path).and_then(|file| file.sync_all()).map_err(|error| BackupError::File(path.to_owned(), error))
}

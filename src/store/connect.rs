//! The one way to a database, for the service and for tests alike.

use std::path::Path;
use std::str::FromStr;
use std::sync::Arc;
use std::time::Duration;

use sqlx::migrate::Migrator;
use sqlx::pool::PoolOptions;
use sqlx::postgres::{PgConnectOptions, PgConnection};
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection, SqliteJournalMode, SqlitePoolOptions, SqliteSynchronous};
use sqlx::{Connection as _, Database};
use tokio::sync::watch;
use tokio::time::timeout;
use uuid::Uuid;

use super::file::DatabaseFile;
use super::health::Health;
use super::statement::{Connection, Held, in_time, query, query_scalar};
use super::{Home, Store, StoreError};
use crate::config::DatabaseConfig;

static MIGRATOR: Migrator = sqlx::migrate!("./migrations");

/// Longest wait for a free connection to a file, and to a server, which may be away: callers are told so before they give up.
const ACQUIRE_TIMEOUT: Duration = Duration::from_secs(10);
const CONNECT_TIMEOUT: Duration = Duration::from_secs(4);
/// Longest wait of a trial write: a probe that waits for a lock is no use as a probe.
const TRIAL_TIMEOUT: Duration = Duration::from_secs(1);
/// What a server is told of our sessions, milliseconds: it ends what a process that was cut off has left behind, so that nobody
/// waits for its locks.
const SESSION: [(&str, &str); 4] = [
    ("statement_timeout", "14000"),
    ("lock_timeout", "10000"),
    ("idle_in_transaction_session_timeout", "15000"),
    ("tcp_user_timeout", "15000"),
];
/// Age at which a connection to a server is made anew: a server that took over from another gets its share.
const MOST_AGE: Duration = Duration::from_secs(1800);

impl Store {
    /// Opens the database, creating the file when it is missing; the tables are left as they are.
    ///
    /// # Errors
    /// When the address is neither SQLite's nor PostgreSQL's, or what it names cannot be opened.
    pub async fn connect(config: &DatabaseConfig) -> Result<Self, StoreError> {
        let home = if is_server(&config.url) { server(config)? } else { file(config).await? };
        Ok(Self {
            home,
            process: Uuid::now_v7(),
            health: Health::default(),
            commits: Arc::new(watch::Sender::new(0)),
            counts: Arc::default(),
        })
    }

    /// Brings the tables up to date; one process at a time.
    ///
    /// # Errors
    /// When a migration fails, or the database was written by a newer version.
    pub async fn migrate(&self) -> Result<(), StoreError> {
        match &self.home {
            Home::Sqlite { write, .. } => MIGRATOR.run(write).await?,
            Home::Postgres { pool } => {
                reach(&pool.connect_options()).await?;
                MIGRATOR.run(pool).await?;
            }
        }
        Ok(())
    }

    /// Whether the database answers and its tables are those of this version.
    ///
    /// # Errors
    /// When it does not answer, or its file is gone.
    pub async fn is_current(&self) -> Result<bool, StoreError> {
        match self.table_version().await {
            Ok(version) => Ok(version == MIGRATOR.iter().map(|migration| migration.version).max()),
            Err(StoreError::NoTable(_)) => Ok(false),
            Err(error) => Err(error),
        }
    }

    async fn table_version(&self) -> Result<Option<i64>, StoreError> {
        let mut connection = self.reader().await?;
        // Names each table there is: a missing one fails here, before anything is computed for it.
        query(
            "SELECT 1 WHERE EXISTS (SELECT 1 FROM runs) OR EXISTS (SELECT 1 FROM idempotency_keys) \
             OR EXISTS (SELECT 1 FROM networks) OR EXISTS (SELECT 1 FROM snapshots) \
             OR EXISTS (SELECT 1 FROM transitions) OR EXISTS (SELECT 1 FROM link_events) \
             OR EXISTS (SELECT 1 FROM jobs) OR EXISTS (SELECT 1 FROM network_runs) \
             OR EXISTS (SELECT 1 FROM latest_forecasts) OR EXISTS (SELECT 1 FROM accounts) \
             OR EXISTS (SELECT 1 FROM backtests) OR EXISTS (SELECT 1 FROM backtest_records) \
             OR EXISTS (SELECT 1 FROM kept_questions) OR EXISTS (SELECT 1 FROM notice_standings) \
             OR EXISTS (SELECT 1 FROM notices) OR EXISTS (SELECT 1 FROM notice_events) \
             OR EXISTS (SELECT 1 FROM spooled_parts) OR EXISTS (SELECT 1 FROM sources) \
             OR EXISTS (SELECT 1 FROM access_keys) OR EXISTS (SELECT 1 FROM access_key_networks) \
             OR EXISTS (SELECT 1 FROM access_key_days) OR EXISTS (SELECT 1 FROM audit)",
        )
        .fetch_optional::<(i32,)>(&mut connection)
        .await?;
        let version = query_scalar("SELECT max(version) FROM _sqlx_migrations WHERE success");
        Ok(version.fetch_one(&mut connection).await?)
    }

    /// Takes the lock of a write and gives it back; of a server, asks whether it takes writes.
    ///
    /// # Errors
    /// When nothing can be written, or another process holds the lock.
    pub async fn try_write(&self) -> Result<(), StoreError> {
        let trial = async {
            match &self.home {
                Home::Sqlite { write, file, .. } => {
                    let mut writer = match write.try_acquire() {
                        Some(writer) => writer,
                        // The writer is at work: proof enough where the last write did not fail.
                        None if !self.health.has_failed() => return Ok(()),
                        None => write.acquire().await?,
                    };
                    let tried = self.try_lock(&mut writer, file).await;
                    if matches!(tried, Err(StoreError::ReadOnly(_))) {
                        // Opened while the file could only be read, it would stay so: the next is opened anew.
                        let _ = writer.close().await;
                    }
                    tried?;
                }
                Home::Postgres { .. } => {
                    let text =
                        "SELECT pg_is_in_recovery() OR CAST(current_setting('transaction_read_only') AS BOOLEAN)";
                    let read_only: bool = query_scalar(text).fetch_one(&mut self.reader().await?).await?;
                    if read_only {
                        return Err(StoreError::ReadOnly(sqlx::Error::Io(
                            std::io::ErrorKind::ReadOnlyFilesystem.into(),
                        )));
                    }
                }
            }
            Ok(())
        };
        match timeout(TRIAL_TIMEOUT, trial).await {
            Ok(Ok(())) => Ok(()),
            Ok(Err(error)) => {
                self.health.note_write(Err(error.fault()));
                Err(error)
            }
            Err(_) => Err(StoreError::Busy(sqlx::Error::PoolTimedOut)),
        }
    }

    /// Takes the lock for writing, and where the last write failed proves by one that changes nothing that it is over.
    async fn try_lock(&self, writer: &mut SqliteConnection, file: &DatabaseFile) -> Result<(), StoreError> {
        let mut transaction = writer.begin_with("BEGIN IMMEDIATE").await?;
        if !self.health.needs_proof() {
            return transaction.rollback().await.map_err(StoreError::from);
        }
        // A full disk gives the lock and refuses the write; this one is on disk when it succeeds.
        sqlx::query("PRAGMA user_version = 0").execute(&mut *transaction).await?;
        transaction.commit().await?;
        self.health.check_room(file)?;
        self.health.note_write(Ok(()));
        Ok(())
    }

    /// Whether other processes may be at work on it.
    pub fn is_shared(&self) -> bool {
        matches!(self.home, Home::Postgres { .. })
    }

    /// A connection to read by.
    pub(super) async fn reader(&self) -> Result<Connection, StoreError> {
        Ok(match &self.home {
            Home::Sqlite { read, file, .. } => {
                file.check()?;
                Connection::Sqlite(Held::Plain(read.acquire().await?))
            }
            Home::Postgres { pool } => Connection::Postgres(Held::Plain(pool.acquire().await?)),
        })
    }

    /// A transaction that reads one state, whatever is written meanwhile.
    pub(super) async fn begin_read(&self) -> Result<Connection, StoreError> {
        Ok(match &self.home {
            Home::Sqlite { read, file, .. } => {
                file.check()?;
                Connection::Sqlite(Held::Transaction(read.begin().await?))
            }
            Home::Postgres { pool } => {
                let begin = pool.begin_with("BEGIN ISOLATION LEVEL REPEATABLE READ READ ONLY");
                Connection::Postgres(Held::Transaction(in_time(begin).await?))
            }
        })
    }

    /// Keeps other services off a file, until the answer is dropped; nothing on a server, which they share.
    ///
    /// # Errors
    /// When another service has the file.
    pub fn keep_alone(&self) -> Result<Option<std::fs::File>, StoreError> {
        match &self.home {
            Home::Sqlite { file, .. } => file.keep_alone().map(Some),
            Home::Postgres { .. } => Ok(None),
        }
    }

    /// Closes every connection, the writer last, so that the write-ahead log is folded into the file.
    pub async fn close(&self) {
        match &self.home {
            Home::Sqlite { write, read, .. } => {
                read.close().await;
                write.close().await;
            }
            Home::Postgres { pool } => pool.close().await,
        }
    }
}

/// The migrations of this version: their numbers and checksums.
pub(super) fn known_migrations() -> impl Iterator<Item = (i64, &'static [u8])> {
    MIGRATOR.iter().map(|migration| (migration.version, migration.checksum.as_ref()))
}

/// Why the file could not be opened, with what to do.
fn opening_fault(error: sqlx::Error, address_fault: impl Fn(String) -> StoreError) -> StoreError {
    match StoreError::from(error) {
        damaged @ StoreError::Damaged(_) => damaged,
        StoreError::Busy(error) => {
            address_fault(format!("another process holds its lock ({error}); stop that process, then start again"))
        }
        StoreError::ReadOnly(error) | StoreError::Unusable(error) => {
            let remedy =
                "give this user leave to read and write the file and its folder, and mount the disk for writing";
            address_fault(format!("it cannot be opened for writing ({error}); {remedy}"))
        }
        other => address_fault(other.to_string()),
    }
}

/// Whether an address is that of a PostgreSQL server.
fn is_server(url: &str) -> bool {
    url.starts_with("postgres:") || url.starts_with("postgresql:")
}

fn server(config: &DatabaseConfig) -> Result<Home, StoreError> {
    let options = PgConnectOptions::from_str(&config.url).map_err(|error| address_fault(config, error.to_string()))?;
    let options = options.application_name("tailcast").options(SESSION);
    // Connected to when it is first needed: a server that is away now may be back then.
    let pool =
        pool_options::<sqlx::Postgres>(config.connections).acquire_timeout(CONNECT_TIMEOUT).max_lifetime(MOST_AGE);
    Ok(Home::Postgres { pool: pool.connect_lazy_with(options) })
}

/// Connects once, by itself: a pool that gets no connection says only that it waited.
async fn reach(options: &PgConnectOptions) -> Result<(), StoreError> {
    let fault = |reason: String| {
        let (host, port, database) =
            (options.get_host(), options.get_port(), options.get_database().unwrap_or_default());
        let remedy = "see that the server is up, can be reached from here, and lets this user in";
        StoreError::Address {
            url: format!("postgres://…{host}:{port}/{database}"),
            reason: format!("{reason}; {remedy}"),
        }
    };
    match timeout(CONNECT_TIMEOUT, PgConnection::connect_with(options)).await {
        Ok(Ok(connection)) => Ok(connection.close().await?),
        Ok(Err(error)) => Err(fault(error.to_string())),
        Err(_) => Err(fault(format!("no answer within {} s", CONNECT_TIMEOUT.as_secs()))),
    }
}

async fn file(config: &DatabaseConfig) -> Result<Home, StoreError> {
    if !config.url.starts_with("sqlite:") || config.url.contains(":memory:") {
        let either =
            "it must name a file, as in sqlite://tailcast.db, or a server, as in postgres://user@host/tailcast";
        return Err(address_fault(config, either.into()));
    }
    let options = SqliteConnectOptions::from_str(&config.url)
        .map_err(|error| address_fault(config, error.to_string()))?
        .busy_timeout(Duration::from_millis(config.busy_timeout_ms))
        .foreign_keys(true)
        .synchronous(SqliteSynchronous::Full);
    let path = options.get_filename().to_owned();
    let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty() && !folder.is_dir());
    if let Some(folder) = folder.map(Path::display) {
        return Err(address_fault(config, format!("the folder {folder} does not exist; make it first")));
    }
    let writing = options.clone().create_if_missing(true).journal_mode(SqliteJournalMode::Wal);
    // No idle or age limit: a local file's connections do not go stale.
    let pool = |size| -> SqlitePoolOptions {
        // A write that fails at its end, on a full disk for one, leaves its transaction to the driver as begun and to SQLite as
        // ended: such a connection would refuse every later one.
        pool_options(size).idle_timeout(None).max_lifetime(None).after_release(
            |connection: &mut SqliteConnection, _| {
                Box::pin(async {
                    if connection.is_in_transaction() {
                        // Whatever undoing is under way ends first.
                        connection.ping().await?;
                    }
                    Ok(!connection.is_in_transaction())
                })
            },
        )
    };
    let write =
        pool(1).connect_with(writing).await.map_err(|error| opening_fault(error, |why| address_fault(config, why)))?;
    // Opened after the writer, which creates the file and its write-ahead log.
    let read = pool(config.readers).connect_with(options.create_if_missing(false).read_only(true)).await?;
    Ok(Home::Sqlite { write, read, file: DatabaseFile::at(&path)? })
}

fn pool_options<DB: Database>(size: u32) -> PoolOptions<DB> {
    PoolOptions::new().max_connections(size).acquire_timeout(ACQUIRE_TIMEOUT)
}

/// A fault of `database.url`, without its password.
pub(super) fn address_fault(config: &DatabaseConfig, reason: String) -> StoreError {
    // Without user, password and options, which may hold another password.
    let url = match url::Url::parse(&config.url) {
        _ if config.url.starts_with("sqlite:") => config.url.clone(),
        Ok(url) => format!("{}://…{}", url.scheme(), url.path()),
        Err(_) => "(not shown)".into(),
    };
    StoreError::Address { url, reason }
}

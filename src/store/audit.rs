//! The trail of writes: a line in the transaction that it tells of.

use std::future::Future;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, OnceLock};

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{time, uuid};
use super::ids::next_id;
use super::statement::{Connection, query, query_scalar};
use super::writes::Scope;
use super::{Store, StoreError};

tokio::task_local! {
    /// Whose request the task is at work for.
    static AUTHOR: Arc<Author>;
}

/// A request that may write, and whose it is.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Authorship {
    /// Id and name of the key; none when none was asked for.
    pub key: Option<(String, String)>,
    /// The method.
    pub method: String,
    /// Template of the path.
    pub route: String,
    /// The path.
    pub path: String,
    /// The network it is about.
    pub network: Option<String>,
    /// The request's id.
    pub request_id: Option<String>,
}

/// A request at work.
#[derive(Debug)]
pub struct Author {
    of: Authorship,
    /// The run or job that it makes.
    made: OnceLock<Uuid>,
    /// Whether its line is written.
    noted: AtomicBool,
}

/// A line of the trail.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AuditLine {
    /// Its id, ordered by time.
    pub id: Uuid,
    /// When.
    pub written_at: Timestamp,
    /// Id and name of the key.
    pub key: Option<(String, String)>,
    /// The method.
    pub method: String,
    /// Template of the path.
    pub route: String,
    /// The path.
    pub path: String,
    /// The network it was about.
    pub network: Option<String>,
    /// The run or job that it made.
    pub made: Option<String>,
    /// The request's id.
    pub request_id: Option<String>,
}

/// Which lines to list; newest first.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct AuditFilter {
    /// Only of the key with this id.
    pub key: Option<String>,
    /// Only about this network.
    pub network: Option<String>,
    /// Only from this time on.
    pub since: Option<Timestamp>,
    /// Only before this time.
    pub until: Option<Timestamp>,
    /// Only lines older than this one.
    pub before: Option<Uuid>,
    /// At most this many.
    pub limit: u32,
}

#[derive(FromRow)]
struct LineRow {
    id: String,
    written_at: i64,
    key_id: Option<String>,
    key_name: Option<String>,
    method: String,
    route: String,
    path: String,
    network: Option<String>,
    made: Option<String>,
    request_id: Option<String>,
}

/// Works for a request: what it writes is told as its.
pub async fn authored<T>(of: Option<Authorship>, work: impl Future<Output = T>) -> T {
    let author = of.map(|of| Arc::new(Author { of, made: OnceLock::new(), noted: AtomicBool::new(false) }));
    authored_on(author, work).await
}

/// Goes on with work for a request, in another task.
pub async fn authored_on<T>(author: Option<Arc<Author>>, work: impl Future<Output = T>) -> T {
    match author {
        Some(author) => AUTHOR.scope(author, work).await,
        None => work.await,
    }
}

/// Whose request the task is at work for; another task that goes on with the work is to be told.
pub fn author() -> Option<Arc<Author>> {
    AUTHOR.try_with(Arc::clone).ok()
}

/// Says what run or job the request makes.
pub(super) fn makes(id: Uuid) {
    if let Some(author) = author() {
        // The first is what was asked for.
        let _ = author.made.set(id);
    }
}

/// Writes the author's line, unless it was written with an earlier transaction of the same request.
pub(super) async fn note(connection: &mut Connection) -> Result<Option<Arc<Author>>, StoreError> {
    let Some(author) = author().filter(|author| !author.noted.load(Ordering::Relaxed)) else { return Ok(None) };
    let of = &author.of;
    let (key_id, key_name) = of.key.clone().unzip();
    query(
        "INSERT INTO audit (id, written_at, key_id, key_name, method, route, path, network, made, request_id) \
         VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10)",
    )
    .bind(next_id().to_string())
    .bind(Timestamp::now().as_microsecond())
    .bind(key_id)
    .bind(key_name)
    .bind(of.method.as_str())
    .bind(of.route.as_str())
    .bind(of.path.as_str())
    .bind(of.network.as_deref())
    .bind(author.made.get().map(Uuid::to_string))
    .bind(of.request_id.as_deref())
    .execute(connection)
    .await?;
    Ok(Some(author))
}

impl Author {
    /// Says that its line is on disk.
    pub(super) fn is_noted(&self) {
        self.noted.store(true, Ordering::Relaxed);
    }
}

impl Store {
    /// Lines that pass the filter, newest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_audit(&self, filter: &AuditFilter) -> Result<Vec<AuditLine>, StoreError> {
        let rows: Vec<LineRow> = query(
            "SELECT id, written_at, key_id, key_name, method, route, path, network, made, request_id FROM audit WHERE true",
        )
        .bind_where("key_id = ?", filter.key.as_deref())
        .bind_where("network = ?", filter.network.as_deref())
        .bind_where("written_at >= ?", filter.since.map(Timestamp::as_microsecond))
        .bind_where("written_at < ?", filter.until.map(Timestamp::as_microsecond))
        .bind_where("id < ?", filter.before.map(|id| id.to_string()))
        .order_by_limit("id DESC", filter.limit)
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(AuditLine::try_from).collect()
    }

    /// Deletes the lines written before `oldest`.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn sweep_audit(&self, oldest: Timestamp) -> Result<(), StoreError> {
        // A write that changes nothing is left out: it would have every copy of what is stored be looked up again.
        let due: i64 = query_scalar("SELECT count(*) FROM audit WHERE written_at < $1")
            .bind(oldest.as_microsecond())
            .fetch_one(&mut self.reader().await?)
            .await?;
        if due == 0 {
            return Ok(());
        }
        let mut transaction = self.begin(Scope::Own).await?;
        query("DELETE FROM audit WHERE written_at < $1")
            .bind(oldest.as_microsecond())
            .execute(&mut transaction)
            .await?;
        self.commit(transaction).await
    }
}

impl TryFrom<LineRow> for AuditLine {
    type Error = StoreError;

    fn try_from(row: LineRow) -> Result<Self, StoreError> {
        Ok(Self {
            id: uuid(&row.id)?,
            written_at: time(row.written_at)?,
            key: row.key_id.zip(row.key_name),
            method: row.method,
            route: row.route,
            path: row.path,
            network: row.network,
            made: row.made,
            request_id: row.request_id,
        })
    }
}

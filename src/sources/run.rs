//! One run of a query in a foreign database.

use std::time::Duration;

use futures_util::TryStreamExt;
use jiff::Timestamp;
use sqlx::{AssertSqlSafe, ConnectOptions, Connection, Executor, PgConnection, SqlSafeStr};
use tokio::time::timeout;

use super::answer::{Row, counts};
use super::{Database, SourceFault};
use crate::model::Snapshot;

/// Longest wait for a connection.
const CONNECT_TIMEOUT: Duration = Duration::from_secs(10);
/// How much longer than the server the client waits: the server's own word on it is better.
const PATIENCE: Duration = Duration::from_secs(5);
/// What stands before the query. Within a SELECT it cannot change anything, its answer has two columns of at most 60 characters and no
/// more rows than are asked for.
const BEFORE: &str = "SELECT left(CAST(counted.degree AS TEXT), 60), left(CAST(counted.nodes AS TEXT), 60) FROM (\n";

/// What is to be counted.
#[derive(Debug, Clone, Copy)]
pub struct Counting<'a> {
    /// A SELECT whose columns are named degree and nodes.
    pub query: &'a str,
    /// Longest time that the database may take.
    pub time: Duration,
    /// Most rows.
    pub most_rows: usize,
}

/// Runs a query, read-only, and reads its answer as a snapshot of the time, in whole seconds, at which it began: a single statement sees
/// one state of its database.
///
/// # Errors
/// When the database cannot be reached, refuses the query, takes too long, or answers something else than degree counts.
pub async fn count(database: &Database, counting: Counting<'_>) -> Result<Snapshot, SourceFault> {
    let connecting = async { database.options()?.connect().await };
    let mut connection = match timeout(CONNECT_TIMEOUT, connecting).await {
        Ok(connected) => connected.map_err(|error| SourceFault::connecting(&error))?,
        Err(_) => return Err(SourceFault::connecting(&sqlx::Error::Io(std::io::ErrorKind::TimedOut.into()))),
    };
    // When it is dropped for its time, so are the connection and the transaction.
    let asked = timeout(counting.time + PATIENCE, rows(&mut connection, counting)).await;
    let (began, rows) = asked.unwrap_or(Err(SourceFault::TooSlow(counting.time)))?;
    // What was read is read: how the session ends does not matter.
    let _ = timeout(PATIENCE, connection.close()).await;
    if rows.len() > counting.most_rows {
        return Err(SourceFault::TooManyRows(counting.most_rows));
    }
    Ok(Snapshot { as_of: began, counts: counts(&rows)? })
}

async fn rows(
    connection: &mut PgConnection,
    Counting { query, time, most_rows }: Counting<'_>,
) -> Result<(Timestamp, Vec<Row>), SourceFault> {
    let fault = |error: sqlx::Error| SourceFault::asking(&error, None, time);
    let begin = connection.begin_with("BEGIN ISOLATION LEVEL REPEATABLE READ READ ONLY");
    let mut transaction = begin.await.map_err(fault)?;
    let limits = format!("SET LOCAL statement_timeout = {}", time.as_millis());
    let limited = sqlx::query(AssertSqlSafe(limits).into_sql_str()).persistent(false).execute(&mut *transaction);
    limited.await.map_err(fault)?;
    // It must be a statement by itself: one that closes the parenthesis it is put into would leave the bounds around it.
    let alone = AssertSqlSafe(without_end(query).to_owned()).into_sql_str();
    let prepared = transaction.prepare(alone).await;
    prepared.map_err(|error| SourceFault::asking(&error, Some(query), time))?;
    // One row more than may be tells that there are too many.
    let text = format!("{BEFORE}{}\n) AS counted LIMIT {}", without_end(query), most_rows.saturating_add(1));
    let began = Timestamp::now();
    // Whoever runs the service lets callers ask this database; a statement with its parameters apart is a single one.
    let asked = sqlx::query_as::<_, Row>(AssertSqlSafe(text).into_sql_str()).persistent(false);
    let rows = asked.fetch(&mut *transaction).try_collect().await.map_err(fault)?;
    transaction.rollback().await.map_err(fault)?;
    Ok((whole_second(began), rows))
}

/// The query without the semicolon that it may end with.
fn without_end(query: &str) -> &str {
    query.trim_end_matches(|last: char| last == ';' || last.is_whitespace())
}

fn whole_second(time: Timestamp) -> Timestamp {
    Timestamp::from_second(time.as_second()).unwrap_or(time)
}

//! Statements that either database runs: one text with `$1` placeholders, what is bound to it, and a connection of either kind.

use std::borrow::Cow;
use std::ops::DerefMut;
use std::time::Duration;

use jiff::Timestamp;
use sqlx::pool::PoolConnection;
use sqlx::postgres::PgRow;
use sqlx::query::{Query, QueryAs};
use sqlx::sqlite::SqliteRow;
use sqlx::{AssertSqlSafe, Database, Encode, FromRow, Postgres, SqlSafeStr, SqlStr, Sqlite, Transaction, Type};
use tokio::time::timeout;

/// Longest wait for PostgreSQL to answer: past it nothing is known of the connection, and waiting on would hold the caller.
const ANSWER_TIMEOUT: Duration = Duration::from_secs(15);

/// A connection to the database.
#[derive(Debug)]
pub enum Connection {
    /// To a file.
    Sqlite(Held<Sqlite>),
    /// To a server.
    Postgres(Held<Postgres>),
}

/// A connection, given back when dropped; a transaction is undone then.
#[derive(Debug)]
pub enum Held<DB: Database> {
    /// Each statement by itself.
    Plain(PoolConnection<DB>),
    /// Statements that go together.
    Transaction(Transaction<'static, DB>),
}

/// What can be read from a row of either database.
pub trait Row: for<'r> FromRow<'r, SqliteRow> + for<'r> FromRow<'r, PgRow> + Send + Unpin {}

impl<T: for<'r> FromRow<'r, SqliteRow> + for<'r> FromRow<'r, PgRow> + Send + Unpin> Row for T {}

/// A value bound to a statement. PostgreSQL is told its type: one text always binds the same types, or a statement that is
/// kept prepared would read one as another.
#[derive(Debug, Clone)]
pub enum Value<'a> {
    /// TEXT
    Text(Option<Cow<'a, str>>),
    /// BIGINT
    Whole(Option<i64>),
    /// DOUBLE PRECISION
    Real(Option<f64>),
    /// BOOLEAN
    Truth(bool),
    /// BYTEA
    Bytes(Cow<'a, [u8]>),
}

/// A statement and what is bound to it.
#[derive(Debug, Clone)]
pub struct Statement<'a> {
    text: Cow<'static, str>,
    bound: Vec<Value<'a>>,
}

/// A statement whose rows have one column.
#[derive(Debug, Clone)]
pub struct ScalarStatement<'a>(Statement<'a>);

/// A statement.
pub fn query<'a>(text: &'static str) -> Statement<'a> {
    Statement { text: Cow::Borrowed(text), bound: Vec::new() }
}

/// A statement whose rows have one column.
pub fn query_scalar<'a>(text: &'static str) -> ScalarStatement<'a> {
    ScalarStatement(query(text))
}

/// Runs a query on whichever database the connection leads to.
macro_rules! on_either {
    ($connection:expr, $statement:expr, $make:ident, $run:ident) => {{
        let statement = $statement;
        match $connection {
            Connection::Sqlite(held) => {
                let text = sql(statement.text);
                statement.bound.into_iter().fold(sqlx::$make(text), Bindable::with).$run(held.inner()).await
            }
            Connection::Postgres(held) => {
                let text = sql(statement.text);
                let query = statement.bound.into_iter().fold(sqlx::$make(text), Bindable::with);
                in_time(query.$run(held.inner())).await
            }
        }
    }};
}

impl<'a> Statement<'a> {
    /// Binds the next placeholder.
    pub fn bind(mut self, value: impl Into<Value<'a>>) -> Self {
        self.bound.push(value.into());
        self
    }

    /// Adds a condition whose `?` is the next placeholder, where there is a value for it: one text a combination, so that each
    /// finds its index.
    pub fn bind_where(self, condition: &str, value: Option<impl Into<Value<'a>>>) -> Self {
        match value {
            None => self,
            Some(value) => {
                let mut bound = self.bind(value);
                let place = bound.bound.len();
                bound.text.to_mut().push_str(&format!(" AND {}", condition.replace('?', &format!("${place}"))));
                bound
            }
        }
    }

    /// Adds text.
    pub fn push(mut self, text: &str) -> Self {
        self.text.to_mut().push_str(text);
        self
    }

    /// Ends it with an order and the most rows to answer.
    pub fn order_by_limit(self, order: &str, limit: u32) -> Self {
        let limited = self.push(" ORDER BY ").push(order).bind(i64::from(limit));
        let place = limited.bound.len();
        limited.push(&format!(" LIMIT ${place}"))
    }

    /// Runs it; answers how many rows it wrote.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn execute(self, connection: &mut Connection) -> Result<u64, sqlx::Error> {
        let statement = self;
        match connection {
            Connection::Sqlite(held) => {
                let text = sql(statement.text);
                let query = statement.bound.into_iter().fold(sqlx::query(text), Bindable::with);
                Ok(query.execute(held.inner()).await?.rows_affected())
            }
            Connection::Postgres(held) => {
                let text = sql(statement.text);
                let query = statement.bound.into_iter().fold(sqlx::query(text), Bindable::with);
                Ok(in_time(query.execute(held.inner())).await?.rows_affected())
            }
        }
    }

    /// Its only row, if there is one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn fetch_optional<T: Row>(self, connection: &mut Connection) -> Result<Option<T>, sqlx::Error> {
        on_either!(connection, self, query_as, fetch_optional)
    }

    /// Its only row.
    ///
    /// # Errors
    /// When there is none, or the database fails.
    pub async fn fetch_one<T: Row>(self, connection: &mut Connection) -> Result<T, sqlx::Error> {
        on_either!(connection, self, query_as, fetch_one)
    }

    /// All its rows.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn fetch_all<T: Row>(self, connection: &mut Connection) -> Result<Vec<T>, sqlx::Error> {
        on_either!(connection, self, query_as, fetch_all)
    }
}

impl<'a> ScalarStatement<'a> {
    /// Binds the next placeholder.
    pub fn bind(self, value: impl Into<Value<'a>>) -> Self {
        Self(self.0.bind(value))
    }

    /// The value of its only row, if there is one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn fetch_optional<T>(self, connection: &mut Connection) -> Result<Option<T>, sqlx::Error>
    where
        (T,): Row,
    {
        Ok(self.0.fetch_optional::<(T,)>(connection).await?.map(|(value,)| value))
    }

    /// The value of its only row.
    ///
    /// # Errors
    /// When there is none, or the database fails.
    pub async fn fetch_one<T>(self, connection: &mut Connection) -> Result<T, sqlx::Error>
    where
        (T,): Row,
    {
        Ok(self.0.fetch_one::<(T,)>(connection).await?.0)
    }

    /// The values of all its rows.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn fetch_all<T>(self, connection: &mut Connection) -> Result<Vec<T>, sqlx::Error>
    where
        (T,): Row,
    {
        Ok(self.0.fetch_all::<(T,)>(connection).await?.into_iter().map(|(value,)| value).collect())
    }
}

impl Connection {
    /// Ends a transaction: what it wrote is on disk when this returns.
    ///
    /// # Errors
    /// When it cannot be told that it is.
    pub async fn commit(self) -> Result<(), sqlx::Error> {
        match self {
            Self::Sqlite(Held::Transaction(transaction)) => transaction.commit().await,
            Self::Postgres(Held::Transaction(transaction)) => in_time(transaction.commit()).await,
            Self::Sqlite(Held::Plain(_)) | Self::Postgres(Held::Plain(_)) => Ok(()),
        }
    }

    /// The time, microseconds since 1970: of a server its own, by which all its clients go.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn now(&mut self) -> Result<i64, sqlx::Error> {
        match self {
            Self::Sqlite(_) => Ok(Timestamp::now().as_microsecond()),
            Self::Postgres(_) => {
                let text = "SELECT CAST(extract(epoch FROM clock_timestamp()) * 1000000 AS BIGINT)";
                query_scalar(text).fetch_one(self).await
            }
        }
    }

    /// What a SELECT adds to skip the rows that another transaction has locked, and to lock those it reads. A file has one
    /// writer, which needs neither.
    pub fn skip_locked(&self) -> &'static str {
        match self {
            Self::Sqlite(_) => "",
            Self::Postgres(_) => " FOR UPDATE SKIP LOCKED",
        }
    }
}

impl<DB: Database> Held<DB> {
    fn inner(&mut self) -> &mut DB::Connection {
        match self {
            Self::Plain(connection) => connection.deref_mut(),
            Self::Transaction(transaction) => transaction.deref_mut(),
        }
    }
}

fn sql(text: Cow<'static, str>) -> SqlStr {
    match text {
        Cow::Borrowed(text) => text.into_sql_str(),
        // Made of our own constants; values are bound.
        Cow::Owned(text) => AssertSqlSafe(text).into_sql_str(),
    }
}

/// Waits for PostgreSQL's answer in bounds.
pub async fn in_time<T>(work: impl Future<Output = Result<T, sqlx::Error>>) -> Result<T, sqlx::Error> {
    match timeout(ANSWER_TIMEOUT, work).await {
        Ok(done) => done,
        Err(_) => Err(sqlx::Error::Io(std::io::ErrorKind::TimedOut.into())),
    }
}

/// A query of sqlx that takes a value.
trait Bindable<'a>: Sized {
    fn with(self, value: Value<'a>) -> Self;
}

macro_rules! bindable {
    ($query:ty $(, $row:ident)?) => {
        impl<'a, DB: Database $(, $row)?> Bindable<'a> for $query
        where
            Option<Cow<'a, str>>: Encode<'a, DB> + Type<DB>,
            Option<i64>: Encode<'a, DB> + Type<DB>,
            Option<f64>: Encode<'a, DB> + Type<DB>,
            bool: Encode<'a, DB> + Type<DB>,
            Cow<'a, [u8]>: Encode<'a, DB> + Type<DB>,
        {
            fn with(self, value: Value<'a>) -> Self {
                match value {
                    Value::Text(text) => self.bind(text),
                    Value::Whole(number) => self.bind(number),
                    Value::Real(number) => self.bind(number),
                    Value::Truth(truth) => self.bind(truth),
                    Value::Bytes(bytes) => self.bind(bytes),
                }
            }
        }
    };
}

bindable!(Query<'a, DB, <DB as Database>::Arguments>);
bindable!(QueryAs<'a, DB, T, <DB as Database>::Arguments>, T);

macro_rules! value {
    ($($from:ty => |$value:ident| $to:expr;)*) => {
        $(impl<'a> From<$from> for Value<'a> {
            fn from($value: $from) -> Self {
                $to
            }
        })*
    };
}

value! {
    &'a str => |text| Self::Text(Some(Cow::Borrowed(text)));
    &'a String => |text| Self::Text(Some(Cow::Borrowed(text)));
    String => |text| Self::Text(Some(Cow::Owned(text)));
    Option<&'a str> => |text| Self::Text(text.map(Cow::Borrowed));
    Option<String> => |text| Self::Text(text.map(Cow::Owned));
    i64 => |number| Self::Whole(Some(number));
    Option<i64> => |number| Self::Whole(number);
    f64 => |number| Self::Real(Some(number));
    Option<f64> => |number| Self::Real(number);
    bool => |truth| Self::Truth(truth);
    &'a [u8] => |bytes| Self::Bytes(Cow::Borrowed(bytes));
    Vec<u8> => |bytes| Self::Bytes(Cow::Owned(bytes));
}

//! PostgreSQL in tests: `TEST_POSTGRES` is the address of a server that `tests/postgres` started. Each service gets a schema of its own
//! there, and every test of the service that names no file runs on it.

use sqlx::{AssertSqlSafe, Connection, PgConnection};
use uuid::Uuid;

/// The server's address; none where the tests run on SQLite alone.
pub fn server() -> Option<String> {
    std::env::var("TEST_POSTGRES").ok().filter(|address| !address.is_empty())
}

/// The address of a schema of its own, where there is a server.
pub async fn fresh() -> Option<String> {
    let server = server()?;
    let schema = format!("s{}", Uuid::now_v7().simple());
    let mut connection = PgConnection::connect(&server).await.unwrap();
    sqlx::query(AssertSqlSafe(format!("CREATE SCHEMA {schema}"))).execute(&mut connection).await.unwrap();
    connection.close().await.unwrap();
    Some(format!("{server}?options=-c%20search_path%3D{schema}"))
}

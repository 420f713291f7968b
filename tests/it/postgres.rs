//! PostgreSQL in tests: `TEST_POSTGRES` is the address of a server that `tests/postgres` started. Each service gets a schema of its own
//! there, and every test of the service that names no file runs on it.

use std::process::Command;

use sqlx::{AssertSqlSafe, Connection, PgConnection};
use tempfile::TempDir;
use uuid::Uuid;

const SCRIPT: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/postgres");

/// The server's address; none where the tests run on SQLite alone.
pub fn server() -> Option<String> {
    std::env::var("TEST_POSTGRES").ok().filter(|address| !address.is_empty())
}

/// The address of a schema of its own, where there is a server.
pub async fn fresh() -> Option<String> {
    Some(fresh_on(&server()?).await)
}

/// The address of a schema of its own on a server.
pub async fn fresh_on(server: &str) -> String {
    let schema = format!("s{}", Uuid::now_v7().simple());
    let mut connection = PgConnection::connect(server).await.unwrap();
    sqlx::query(AssertSqlSafe(format!("CREATE SCHEMA {schema}"))).execute(&mut connection).await.unwrap();
    connection.close().await.unwrap();
    format!("{server}?options=-c%20search_path%3D{schema}")
}

/// A server for tests that need one: that of `TEST_POSTGRES`, or else one of their own, where PostgreSQL is installed. Stopped when dropped.
pub struct Server {
    address: String,
    own: Option<TempDir>,
}

impl Server {
    /// None, loudly, where there is no PostgreSQL.
    pub fn given_or_own() -> Option<Self> {
        if let Some(address) = server() {
            return Some(Self { address, own: None });
        }
        let folder = tempfile::tempdir().unwrap();
        let started = Command::new(SCRIPT).arg("start").arg(folder.path()).output().unwrap();
        if !started.status.success() {
            eprintln!(
                "NOT RUN: this test needs PostgreSQL; install it (Debian: apt-get install postgresql) or set TEST_POSTGRES"
            );
            return None;
        }
        let address = String::from_utf8(started.stdout).unwrap().trim().to_owned();
        Some(Self { address, own: Some(folder) })
    }

    /// The address of a schema of its own.
    pub async fn fresh(&self) -> String {
        fresh_on(&self.address).await
    }
}

impl Drop for Server {
    fn drop(&mut self) {
        if let Some(folder) = &self.own {
            let _ = Command::new(SCRIPT).arg("stop").arg(folder.path()).status();
        }
    }
}

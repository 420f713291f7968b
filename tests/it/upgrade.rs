//! A database of the first version, with a run of that time: opened, brought up to date, and answered from.

use std::str::FromStr;

use sqlx::sqlite::SqliteConnectOptions;
use sqlx::{ConnectOptions, Connection};

use crate::harness::Service;

const ID: &str = "0190a0b0-0000-7000-8000-000000000001";
/// As the first version answered a fit: no verdict, no losses, no parameter of a candidate.
const DOCUMENT: &str = r#"{"id":"0190a0b0-0000-7000-8000-000000000001","created_at":"2026-06-01T00:00:00Z","network":null,"label":"old","engine":"tailcast 0.1.0","seed":1,"inputs_digest":"sha-256:0000000000000000000000000000000000000000000000000000000000000000","fit":{"model":"mix","evidence":"one_snapshot","preferential_share":{"estimate":0.7,"low":0.6,"high":0.8,"level":0.9},"links_per_arrival":{"estimate":3.0,"low":null,"high":null,"level":null},"arrivals_per_day":null,"tail_exponent":null,"entry_degrees":[[0,1.0]],"candidates":[{"model":"mix","preferential_share":0.7,"log_likelihood":-1.0,"aic":4.0,"weight":1.0}],"goodness":null},"tail":[{"degree":1,"observed":5,"fitted":5.5}],"warnings":[],"cautions":[]}"#;

#[tokio::test]
async fn a_run_of_the_first_version_is_read_in_every_form() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("old.db").display());
    let first = folder.path().join("migrations");
    std::fs::create_dir(&first).unwrap();
    let migrations = concat!(env!("CARGO_MANIFEST_DIR"), "/migrations/0001_runs.sql");
    std::fs::copy(migrations, first.join("0001_runs.sql")).unwrap();
    let options = SqliteConnectOptions::from_str(&url).unwrap().create_if_missing(true);
    let mut database = options.connect().await.unwrap();
    sqlx::migrate::Migrator::new(first.as_path()).await.unwrap().run_direct(None, &mut database, false).await.unwrap();
    sqlx::query(
        "INSERT INTO runs (id, kind, label, created_at, engine, seed, inputs_digest, tag, document, inputs) \
         VALUES ($1, 'fit', 'old', 1780272000000000, 'tailcast 0.1.0', 1, $2, 'tag', $3, '{}')",
    )
    .bind(ID)
    .bind(format!("sha-256:{}", "0".repeat(64)))
    .bind(DOCUMENT)
    .execute(&mut database)
    .await
    .unwrap();
    database.close().await.unwrap();

    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let run = service.get(&format!("/v1/fits/{ID}")).await;
    assert_eq!((run.status, run.text.as_str()), (200, DOCUMENT));
    let table = service.get(&format!("/v1/fits/{ID}?format=csv")).await;
    assert_eq!(table.status, 200, "{}", table.text);
    assert!(table.text.contains("1,5,5.5"), "{}", table.text);
    assert_eq!(service.get("/v1/networks").await.status, 200);
    service.stop().await;
}

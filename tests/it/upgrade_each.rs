//! Every version's tables with what a service keeps in them: brought up to date by this one, and read through it.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::str::FromStr;

use serde_json::{Value, json};
use sqlx::sqlite::SqliteConnectOptions;
use sqlx::{AssertSqlSafe, ConnectOptions, Connection};

use crate::harness::{Service, csv, fit_body, forecast_body};
use crate::notice_receiver::Receiver;
use crate::notices::sends;
use crate::tracking::{grown, settings};

/// The migrations, oldest first, with their numbers.
fn migrations() -> Vec<(i64, PathBuf)> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("migrations");
    let numbered = std::fs::read_dir(folder).unwrap().map(|entry| {
        let path = entry.unwrap().path();
        let name = path.file_name().unwrap().to_str().unwrap();
        (name.split('_').next().unwrap().parse().unwrap(), path.clone())
    });
    numbered.collect::<BTreeMap<_, _>>().into_iter().collect()
}

/// What this version answers of everything that it keeps: path, first version that kept it, answer.
async fn keep_everything(service: &Service) -> Vec<(String, i64, Value)> {
    let network = "/v1/networks/heronsgate";
    let fit = service.post("/v1/fits", &fit_body()).await.expect(201).json();
    let forecast = service.post("/v1/forecasts", &forecast_body()).await.expect(201).json();
    service.put(network, &json!({"degree_kind": "received"})).await.expect(201);
    let list = csv(&crate::jobs::link_list(3000));
    service.put_with(&format!("{network}/links?every=P1M"), list, &[]).await.expect(200);
    for (as_of, counts) in
        ["2026-06-01", "2026-07-01", "2026-08-01"].iter().zip(grown(&[60.0, 90.0, 120.0], |_| (20.0, 3.0)))
    {
        // A network of its own: a list leaves no snapshots beside its own.
        service.put("/v1/networks/plain", &json!({"degree_kind": "received"})).await;
        let put = json!({"degree_counts": crate::harness::pairs(&counts)});
        service.put(&format!("/v1/networks/plain/snapshots/{as_of}"), &put).await.expect(201);
    }
    service
        .put(&format!("{network}/limits/fan-out"), &json!({"threshold": 10, "max_nodes": 1, "by": "2026-12-01"}))
        .await
        .expect(201);
    service.put(&format!("{network}/scenarios/launch"), &json!({"arrivals": {"per_day": 9.0}})).await.expect(201);
    service.put(network, &settings()).await.expect(200);
    let backtest = service.post("/v1/networks/plain/backtests", &json!({"thresholds": [3]})).await.expect(201).json();
    settled_all(service).await;
    let id = |value: &Value| value["id"].as_str().unwrap().to_owned();
    let list = service.get("/v1/jobs?network=heronsgate&limit=50").await.expect(200).json();
    let counting = list["items"].as_array().unwrap().iter().find(|job| job["kind"] == "link_list").unwrap();
    let paths = [
        (format!("/v1/fits/{}", id(&fit)), 1),
        (format!("/v1/forecasts/{}", id(&forecast)), 1),
        (format!("{network}/snapshots"), 2),
        ("/v1/networks/plain/snapshots/2026-07-01".to_owned(), 2),
        (format!("{network}/transitions"), 2),
        (format!("{network}/link-events"), 2),
        (format!("/v1/jobs/{}", id(counting)), 3),
        (format!("{network}/forecasts/latest"), 4),
        (format!("{network}/accuracy"), 4),
        (network.to_owned(), 4),
        (format!("/v1/backtests/{}", id(&backtest)), 5),
        (format!("{network}/limits/fan-out"), 6),
        (format!("{network}/scenarios/launch"), 6),
        (format!("{network}/notices/on-call"), 7),
    ];
    service.put(&format!("{network}/notices/on-call"), &json!({"url": "http://127.0.0.1:9/hook"})).await;
    let mut kept = Vec::new();
    for (path, since) in paths {
        let answer = service.get(&path).await;
        if answer.status != 200 {
            panic!("{path}: {}", answer.text);
        }
        kept.push((path, since, answer.json()));
    }
    kept
}

async fn settled_all(service: &Service) {
    for _ in 0..600 {
        let jobs = service.get("/v1/jobs?limit=200").await.expect(200).json();
        if !jobs["items"].as_array().unwrap().iter().any(crate::jobs::is_live) {
            return;
        }
        tokio::time::sleep(std::time::Duration::from_millis(50)).await;
    }
    panic!("jobs do not end");
}

/// A database as the migrations up to `version` left it, with whatever of `full` its tables and columns can hold.
async fn database_of(folder: &Path, version: i64, full: &Path) -> String {
    let earlier = folder.join("migrations");
    std::fs::create_dir(&earlier).unwrap();
    for (_, path) in migrations().into_iter().filter(|&(number, _)| number <= version) {
        std::fs::copy(&path, earlier.join(path.file_name().unwrap())).unwrap();
    }
    let url = format!("sqlite://{}", folder.join("old.db").display());
    let options = SqliteConnectOptions::from_str(&url).unwrap().create_if_missing(true).foreign_keys(false);
    let mut old = options.connect().await.unwrap();
    let migrator = sqlx::migrate::Migrator::new(earlier.as_path()).await.unwrap();
    migrator.run_direct(None, &mut old, false).await.unwrap();
    sqlx::query("ATTACH $1 AS full").bind(full.to_str().unwrap()).execute(&mut old).await.unwrap();
    let tables: Vec<String> = sqlx::query_scalar(
        "SELECT name FROM main.sqlite_schema WHERE type = 'table' AND name NOT LIKE 'sqlite%' AND name <> '_sqlx_migrations'",
    )
    .fetch_all(&mut old)
    .await
    .unwrap();
    for table in tables {
        let columns: Vec<String> = sqlx::query_scalar(
            "SELECT name FROM pragma_table_info($1, 'main') WHERE name IN (SELECT name FROM pragma_table_info($1, 'full'))",
        )
        .bind(&table)
        .fetch_all(&mut old)
        .await
        .unwrap();
        let columns = columns.join(", ");
        // Versions before the fourth knew one kind of job.
        let rows = if table == "jobs" && version < 4 { "WHERE kind = 'link_list'" } else { "" };
        let copy = format!("INSERT INTO main.{table} ({columns}) SELECT {columns} FROM full.{table} {rows}");
        sqlx::query(AssertSqlSafe(copy)).execute(&mut old).await.unwrap();
    }
    let dangling: Vec<(String,)> =
        sqlx::query_as("SELECT \"table\" FROM pragma_foreign_key_check").fetch_all(&mut old).await.unwrap();
    assert!(dangling.is_empty(), "{dangling:?}");
    old.close().await.unwrap();
    url
}

#[tokio::test(flavor = "multi_thread")]
async fn every_versions_tables_are_brought_up_to_date_and_read() {
    let receiver = Receiver::start().await;
    let folder = tempfile::tempdir().unwrap();
    let full = folder.path().join("full.db");
    let start = async |url: String| {
        Service::start_with(|config| {
            config.database.url = url;
            config.jobs.wait_seconds = 100;
            sends(config, &[&receiver.origin(), "http://127.0.0.1:9"]);
        })
        .await
    };
    let service = start(format!("sqlite://{}", full.display())).await;
    let kept = keep_everything(&service).await;
    service.stop().await;
    let newest = migrations().last().unwrap().0;
    let versions = kept.iter().map(|&(_, since, _)| since).max().unwrap();
    assert!(versions <= newest);
    for (version, _) in migrations() {
        let folder = tempfile::tempdir().unwrap();
        let service = start(database_of(folder.path(), version, &full).await).await;
        let mut read = 0;
        for (path, _, before) in kept.iter().filter(|&&(_, since, _)| since <= version) {
            let answer = service.get(path).await;
            assert_eq!((answer.status, &answer.json()), (200, before), "{path} of version {version}");
            read += 1;
        }
        assert!(read >= 2, "version {version}");
        service.get("/readyz").await.expect(200);
        // It can be written: a snapshot is stored, and followed by a forecast where there is a plan.
        if version >= 4 {
            let body = json!({"degree_counts": crate::harness::pairs(&crate::harness::COUNTS[1])});
            service.put("/v1/networks/plain/snapshots/2026-09-01", &body).await.expect(201);
        }
        service.post("/v1/fits", &fit_body()).await.expect(201);
        service.stop().await;
    }
}

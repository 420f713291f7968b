//! What is older or more than is to be kept goes, and what must stay stays.

use std::collections::BTreeSet;
use std::time::{Duration, Instant};

use reqwest::Method;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};
use tailcast::config::RetentionConfig;

use crate::harness::{COUNTS, Service, answered, changed, fit_body};
use crate::tracking::{put_counts, settings, settled};

const DAY: i64 = 86_400_000_000;

async fn service(url: &str, change: impl Fn(&mut RetentionConfig)) -> Service {
    Service::start_with(|config| {
        config.database.url = url.to_owned();
        config.retention.every_seconds = 1;
        change(&mut config.retention);
    })
    .await
}

async fn database(url: &str) -> SqliteConnection {
    SqliteConnection::connect(url).await.unwrap()
}

/// Runs a statement whose `$1` is now, in microseconds.
async fn alter(database: &mut SqliteConnection, statement: &'static str) {
    let now = jiff::Timestamp::now().as_microsecond();
    sqlx::query(statement).bind(now).execute(database).await.unwrap();
}

async fn ids(database: &mut SqliteConnection, statement: &'static str) -> BTreeSet<String> {
    let ids: Vec<String> = sqlx::query_scalar(statement).fetch_all(database).await.unwrap();
    ids.into_iter().collect()
}

/// Waits until a query answers `expected`, and sees that it still does after another sweep.
async fn settles(database: &mut SqliteConnection, statement: &'static str, expected: &BTreeSet<String>) {
    let begun = Instant::now();
    while &ids(database, statement).await != expected {
        assert!(begun.elapsed() < Duration::from_secs(20), "{:?} and not {expected:?}", ids(database, statement).await);
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
    tokio::time::sleep(Duration::from_millis(1300)).await;
    assert_eq!(&ids(database, statement).await, expected, "another sweep takes no more");
}

async fn fit(service: &Service, key: Option<&str>) -> String {
    let request = service.request(Method::POST, "/v1/fits").header("content-type", "application/json");
    let request = key.into_iter().fold(request, |request, key| request.header("idempotency-key", key));
    let body = changed(fit_body(), "/fixed", json!({"preferential_share": 0.7}));
    answered(request.body(body.to_string())).await.expect(201).json()["id"].as_str().unwrap().to_owned()
}

#[tokio::test]
async fn old_runs_go_and_young_keys_keep_theirs() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("kept.db").display());
    // Nothing goes by default, however old.
    let keeps_all = service(&url, |_| {}).await;
    let mut runs = Vec::new();
    for key in [None, Some("young"), Some("old"), None] {
        runs.push(fit(&keeps_all, key).await);
    }
    let mut file = database(&url).await;
    for (run, age) in runs.iter().zip([36, 36, 72, 1]) {
        sqlx::query("UPDATE runs SET created_at = created_at - $2 WHERE id = $1")
            .bind(run)
            .bind(age * DAY / 24)
            .execute(&mut file)
            .await
            .unwrap();
    }
    let all: BTreeSet<String> = runs.iter().cloned().collect();
    settles(&mut file, "SELECT id FROM runs", &all).await;
    keeps_all.stop().await;

    let by_age = service(&url, |keep| (keep.fits_days, keep.keys_hours) = (1, 48)).await;
    let kept = BTreeSet::from([runs[1].clone(), runs[3].clone()]);
    settles(&mut file, "SELECT id FROM runs", &kept).await;
    by_age.get(&format!("/v1/fits/{}", runs[0])).await.expect(404);
    let metrics = by_age.get("/metrics").await.expect(200).text;
    assert!(metrics.contains("tailcast_retention_removed_total{kind=\"fits\"}"), "{metrics}");
    // The key still leads to its run.
    assert_eq!(fit(&by_age, Some("young")).await, runs[1]);
    by_age.stop().await;

    // The newest so many stay; one with a young key is not counted out either.
    let by_count = service(&url, |keep| (keep.fits_most, keep.keys_hours) = (2, 48)).await;
    let newest = [fit(&by_count, None).await, fit(&by_count, None).await];
    let kept = BTreeSet::from([runs[1].clone(), newest[0].clone(), newest[1].clone()]);
    settles(&mut file, "SELECT id FROM runs", &kept).await;
    by_count.stop().await;
}

#[tokio::test]
async fn what_networks_need_stays_however_old_it_is() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("kept.db").display());
    let first = service(&url, |_| {}).await;
    // Three issued forecasts, the first two with accounts.
    first.put("/v1/networks/heronsgate", &settings()).await.expect(201);
    for (as_of, counts) in [("2026-06-01", &COUNTS[0]), ("2026-07-01", &COUNTS[1]), ("2026-07-15", &COUNTS[1])] {
        put_counts(&first, as_of, counts).await;
        settled(&first).await;
    }
    let mut file = database(&url).await;
    let issued: Vec<String> = ids(&mut file, "SELECT run_id FROM network_runs").await.into_iter().collect();
    let latest = ids(&mut file, "SELECT run_id FROM latest_forecasts").await;
    assert_eq!((issued.len(), latest.first()), (3, issued.last()));
    assert!(ids(&mut file, "SELECT DISTINCT run_id FROM accounts").await.contains(&issued[0]));
    // The first has no date to come, the second has; all are old.
    alter(&mut file, "UPDATE runs SET created_at = $1 - 8640000000000").await;
    for (run, last) in [(&issued[0], "2026-08-01"), (&issued[1], "2126-08-01"), (&issued[2], "2026-08-01")] {
        sqlx::query("UPDATE network_runs SET issued_to = $2 || 'T00:00:00.000000000Z' WHERE run_id = $1")
            .bind(run)
            .bind(last)
            .execute(&mut file)
            .await
            .unwrap();
    }
    for id in ["0190a0b0-0000-7000-8000-00000000000a", "0190a0b0-0000-7000-8000-00000000000b"] {
        sqlx::query(
            "INSERT INTO backtests (id, network, created_at, revision, evidence, task, tag, document) \
             VALUES ($1, 'heronsgate', 5, 1, $2, '{}', $2, '{}')",
        )
        .bind(id)
        .bind("0".repeat(64))
        .execute(&mut file)
        .await
        .unwrap();
    }
    alter(&mut file, "UPDATE jobs SET created_at = 5, ended_at = $1 - 864000000000").await;
    for (id, state) in
        [("0190a0b0-0000-7000-8000-00000000000c", "waiting"), ("0190a0b0-0000-7000-8000-00000000000d", "failed")]
    {
        sqlx::query("INSERT INTO jobs (id, kind, network, state, starts, created_at, ended_at, task) VALUES ($1, 'backtest', 'elsewhere', $2, 9, 5, $3, '{}')")
            .bind(id)
            .bind(state)
            .bind((state == "failed").then(|| jiff::Timestamp::now().as_microsecond() - DAY / 2))
            .execute(&mut file)
            .await
            .unwrap();
    }
    let stands = ids(&mut file, "SELECT refresh_job FROM networks").await;
    first.stop().await;

    let second = service(&url, |keep| {
        (keep.forecasts_days, keep.forecasts_most) = (1, 1);
        (keep.issued_days, keep.backtests_days, keep.jobs_days) = (30, 30, 1);
    })
    .await;
    settles(&mut file, "SELECT id FROM runs", &issued[1..].iter().cloned().collect()).await;
    assert!(
        !ids(&mut file, "SELECT run_id FROM accounts").await.contains(&issued[0]),
        "accounts go with their forecast"
    );
    settles(
        &mut file,
        "SELECT id FROM backtests",
        &BTreeSet::from(["0190a0b0-0000-7000-8000-00000000000b".to_owned()]),
    )
    .await;
    let jobs = ids(&mut file, "SELECT id FROM jobs").await;
    let mut expected = stands.clone();
    // The one that waited was begun and has ended, just now.
    expected
        .extend(["0190a0b0-0000-7000-8000-00000000000c", "0190a0b0-0000-7000-8000-00000000000d"].map(str::to_owned));
    assert_eq!(jobs, expected);
    second.get("/v1/networks/heronsgate/forecasts/latest").await.expect(200);
    second.get("/v1/networks/heronsgate/accuracy").await.expect(200);
    let gone: Value = second.get(&format!("/v1/forecasts/{}", issued[0])).await.expect_problem(404, "not_found").json();
    assert!(gone["detail"].as_str().unwrap().contains("deleted"), "{gone}");
    second.stop().await;
}

#[tokio::test]
async fn sizes_are_told_in_bytes_and_rows() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("sizes.db").display());
    let first = service(&url, |_| {}).await;
    fit(&first, None).await;
    first.stop().await;
    let second = service(&url, |_| {}).await;
    let begun = Instant::now();
    let value = async |name: &str| -> Option<f64> {
        let text = second.get("/metrics").await.expect(200).text;
        text.lines().find_map(|line| line.strip_prefix(name)?.trim().parse().ok())
    };
    // Other services of this process tell theirs under the same names, some of them of a file that is yet to be filled.
    for (name, least) in [
        ("tailcast_database_bytes", 4097.0),
        ("tailcast_database_log_bytes", 0.0),
        ("tailcast_database_free_bytes", 0.0),
        ("tailcast_spool_bytes", 0.0),
        ("tailcast_disk_free_bytes", 1.0),
        ("tailcast_database_rows{table=\"runs\"}", 0.0),
        ("tailcast_database_rows{table=\"networks\"}", 0.0),
    ] {
        while value(name).await.is_none_or(|value| value < least) {
            assert!(begun.elapsed() < Duration::from_secs(90), "{name}");
            tokio::time::sleep(Duration::from_millis(30)).await;
        }
    }
    second.stop().await;
}

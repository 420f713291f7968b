//! A network keeps itself up to date, and its backtests end, through kills at any moment: each change is followed by one forecast, and none is lost.

use std::collections::BTreeSet;
use std::time::{Duration, Instant};

use reqwest::Client;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};

use crate::harness::pairs;
use crate::jobs::is_live;
use crate::process::{Served, serve};
use crate::tracking::{grown, settings};

/// Times the process is killed.
const ROUNDS: usize = 8;

async fn read(client: &Client, served: &Served, path: &str) -> Value {
    client.get(format!("http://{}{path}", served.address)).send().await.unwrap().json().await.unwrap()
}

/// All jobs of the network when each has ended, newest first.
async fn ended_jobs(client: &Client, served: &Served) -> Vec<Value> {
    let begun = Instant::now();
    loop {
        let list = read(client, served, "/v1/jobs?network=heronsgate&limit=200").await;
        let jobs = list["items"].as_array().unwrap();
        if !jobs.iter().any(is_live) {
            return jobs.clone();
        }
        assert!(begun.elapsed() < Duration::from_secs(180), "{jobs:?}");
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn no_kill_loses_a_snapshot_or_a_refresh_or_does_one_twice() {
    let folder = tempfile::tempdir().unwrap();
    let client = Client::builder().no_proxy().build().unwrap();
    let days: Vec<f64> = (0..2 * ROUNDS as u32).map(|round| 60.0 + 10.0 * f64::from(round)).collect();
    let counts = grown(&days, |_| (50.0, 3.0));
    let date =
        |place: usize| format!("2026-{:02}-01", place % 12 + 1).replace("2026", &(2026 + place / 12).to_string());
    let mut acknowledged = BTreeSet::new();
    for round in 0..ROUNDS {
        let served = serve(folder.path());
        let network = format!("http://{}/v1/networks/heronsgate", served.address);
        let stored = client.put(&network).json(&settings()).send().await.unwrap();
        assert!(stored.status().is_success());
        for place in [2 * round, 2 * round + 1] {
            let body = json!({"degree_counts": pairs(&counts[place])});
            let put = client.put(format!("{network}/snapshots/{}", date(place))).json(&body).send().await;
            if put.is_ok_and(|answer| answer.status().is_success()) {
                acknowledged.insert(date(place));
            }
        }
        // At a different moment each round: before the refresh begins, while it computes, while it stores.
        tokio::time::sleep(Duration::from_millis((37 * round as u64 * round as u64) % 600)).await;
        served.kill();
    }
    let served = serve(folder.path());
    let network = format!("http://{}/v1/networks/heronsgate", served.address);
    let read = async |path: &str| read(&client, &served, path).await;
    let jobs = ended_jobs(&client, &served).await;
    let kept = read("/v1/networks/heronsgate/snapshots?limit=200").await;
    let kept: BTreeSet<String> =
        kept["items"].as_array().unwrap().iter().map(|line| line["as_of"].as_str().unwrap().to_owned()).collect();
    assert_eq!(kept, acknowledged);
    // Every job ended, and each that says it made a forecast made one of its own.
    let sound = |job: &Value| job["state"] == "succeeded" || job["problem"]["code"] == "no_snapshot";
    assert!(jobs.iter().all(sound), "{jobs:?}");
    let made: Vec<&str> = jobs.iter().filter_map(|job| job["result"]["forecast"].as_str()).collect();
    let lines = read("/v1/forecasts?network=heronsgate&limit=200").await;
    let issued: Vec<&str> =
        lines["items"].as_array().unwrap().iter().map(|line| line["id"].as_str().unwrap()).collect();
    assert_eq!(made.iter().collect::<BTreeSet<_>>(), issued.iter().collect::<BTreeSet<_>>());
    assert_eq!(made.len(), issued.len(), "no forecast by two jobs");
    let latest = client.get(format!("{network}/forecasts/latest")).send().await.unwrap();
    assert_eq!(latest.headers()["forecast-state"], "current");
    let latest: Value = latest.json().await.unwrap();
    assert_eq!(latest["id"], issued[0]);
    drop(served);
    let url = format!("sqlite://{}", folder.path().join("tailcast.db").display());
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    let (revision, refreshed): (i64, i64) =
        sqlx::query_as("SELECT revision, refreshed FROM networks").fetch_one(&mut database).await.unwrap();
    assert_eq!(revision, refreshed, "the latest forecast stands on the newest revision");
    let twice: i64 = sqlx::query_scalar(
        "SELECT count(*) FROM (SELECT revision FROM network_runs WHERE issued_to IS NOT NULL GROUP BY revision \
         HAVING count(*) > 1)",
    )
    .fetch_one(&mut database)
    .await
    .unwrap();
    assert_eq!(twice, 0, "no revision has two forecasts");
}

/// However often the process is killed, each backtest ends exactly once, and no record that is kept is lost.
#[tokio::test(flavor = "multi_thread")]
async fn no_kill_loses_a_backtest_or_makes_one_twice() {
    let folder = tempfile::tempdir().unwrap();
    let client = Client::builder().no_proxy().build().unwrap();
    let days: Vec<f64> = (0..10).map(|month| 60.0 + 30.0 * f64::from(month)).collect();
    let served = serve(folder.path());
    let network = format!("http://{}/v1/networks/heronsgate", served.address);
    client.put(&network).json(&json!({"degree_kind": "received"})).send().await.unwrap().error_for_status().unwrap();
    for (month, counts) in grown(&days, |_| (20.0, 3.0)).iter().enumerate() {
        let body = json!({"degree_counts": pairs(counts)});
        let put = client.put(format!("{network}/snapshots/2026-{:02}-01", month + 1)).json(&body);
        put.send().await.unwrap().error_for_status().unwrap();
    }
    served.kill();
    let url = format!("sqlite://{}", folder.path().join("tailcast.db").display());
    let origins = async || -> Vec<i64> {
        let mut database = SqliteConnection::connect(&url).await.unwrap();
        let query = sqlx::query_scalar("SELECT origin FROM backtest_records ORDER BY origin");
        query.fetch_all(&mut database).await.unwrap()
    };
    let (mut taken, mut kept) = (BTreeSet::new(), Vec::new());
    for round in 0..ROUNDS {
        let served = serve(folder.path());
        let asked = client
            .post(format!("http://{}/v1/networks/heronsgate/backtests", served.address))
            .header("prefer", "respond-async")
            .json(&json!({"thresholds": [3, 10]}));
        let asked = asked.send().await.unwrap();
        // 409 while the one before goes on.
        match asked.status().as_u16() {
            202 => {
                kept.clear();
                taken.insert(asked.json::<Value>().await.unwrap()["id"].as_str().unwrap().to_owned());
            }
            status => assert_eq!(status, 409),
        }
        tokio::time::sleep(Duration::from_millis((97 * round as u64 * round as u64) % 900)).await;
        served.kill();
        let now = origins().await;
        assert!(now.is_empty() || now.starts_with(&kept), "{kept:?} {now:?}");
        kept = now;
    }
    let served = serve(folder.path());
    let read = async |path: &str| read(&client, &served, path).await;
    let jobs = ended_jobs(&client, &served).await;
    let ids =
        |lines: &[Value]| -> Vec<String> { lines.iter().map(|line| line["id"].as_str().unwrap().to_owned()).collect() };
    let mut ended = ids(&jobs);
    ended.reverse();
    assert_eq!(ended, taken.into_iter().collect::<Vec<_>>());
    // Begun again four times without a step forward, a job is given up; all others are backtests.
    let given_up = |job: &Value| job["problem"]["code"] == "interrupted";
    assert!(jobs.iter().all(|job| job["state"] == "succeeded" || given_up(job)), "{jobs:?}");
    let made: Vec<Value> = jobs.iter().filter(|job| !given_up(job)).cloned().collect();
    let list = read("/v1/networks/heronsgate/backtests?limit=200").await;
    assert_eq!(ids(list["items"].as_array().unwrap()), ids(&made));
    assert!(origins().await.is_empty());
}

//! Two processes on one PostgreSQL: what one is told the other knows, and what one leaves the other ends, once.

use std::collections::BTreeSet;
use std::process::Command;
use std::time::{Duration, Instant};

use reqwest::{Client, Response};
use serde_json::{Value, json};
use sqlx::{Connection, PgConnection};
use tempfile::TempDir;

use crate::harness::{changed, fit_body, pairs};
use crate::jobs::{is_live, link_list};
use crate::postgres::Server;
use crate::process::{Served, command, serve_with};
use crate::tracking::{grown, settings};

const NETWORK: &str = "/v1/networks/heronsgate";

struct Pair {
    first: Served,
    second: Served,
    client: Client,
    url: String,
    _server: Server,
    _folder: TempDir,
}

impl Pair {
    async fn start() -> Option<Self> {
        let server = Server::given_or_own()?;
        let url = server.fresh().await;
        let folder = tempfile::tempdir().unwrap();
        let serve = || serve_with(folder.path(), &[("TAILCAST_DATABASE_URL", &url)]);
        let (first, second) = (serve(), serve());
        let client = Client::builder().no_proxy().build().unwrap();
        Some(Self { first, second, client, url, _server: server, _folder: folder })
    }

    async fn get(&self, served: &Served, path: &str) -> Response {
        self.client.get(format!("http://{}{path}", served.address)).send().await.unwrap()
    }

    async fn read(&self, served: &Served, path: &str) -> Value {
        self.get(served, path).await.json().await.unwrap()
    }

    async fn put(&self, served: &Served, path: &str, body: &Value) {
        let put = self.client.put(format!("http://{}{path}", served.address)).json(body);
        put.send().await.unwrap().error_for_status().unwrap();
    }

    /// A network with so many months of snapshots, put at the first.
    async fn put_months(&self, months: u32) {
        self.put(&self.first, NETWORK, &json!({"degree_kind": "received"})).await;
        let days: Vec<f64> = (0..months).map(|month| 60.0 + 30.0 * f64::from(month)).collect();
        for (month, counts) in grown(&days, |_| (20.0, 3.0)).iter().enumerate() {
            let path = format!("{NETWORK}/snapshots/2026-{:02}-01", month + 1);
            self.put(&self.first, &path, &json!({"degree_counts": pairs(counts)})).await;
        }
    }

    /// Takes a backtest on at a replica: its job.
    async fn backtest_at(&self, served: &Served) -> String {
        let asked = self.client.post(format!("http://{}{NETWORK}/backtests", served.address));
        let asked = asked.header("prefer", "respond-async").json(&json!({"thresholds": [3, 10]}));
        let asked = asked.send().await.unwrap();
        assert_eq!(asked.status(), 202);
        asked.json::<Value>().await.unwrap()["id"].as_str().unwrap().to_owned()
    }

    /// A job as a replica tells it, when it is as wanted.
    async fn job_when(&self, served: &Served, id: &str, wanted: impl Fn(&Value) -> bool) -> Value {
        let begun = Instant::now();
        loop {
            let job = self.read(served, &format!("/v1/jobs/{id}")).await;
            if wanted(&job) {
                return job;
            }
            assert!(begun.elapsed() < Duration::from_secs(90), "{job}");
            tokio::time::sleep(Duration::from_millis(20)).await;
        }
    }

    async fn count(&self, text: &'static str) -> i64 {
        let mut database = PgConnection::connect(&self.url).await.unwrap();
        sqlx::query_scalar(text).fetch_one(&mut database).await.unwrap()
    }

    async fn latest_run(&self, database: &mut PgConnection) -> Option<String> {
        sqlx::query_scalar("SELECT run_id FROM latest_forecasts").fetch_optional(database).await.unwrap()
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn what_one_is_told_the_other_knows_and_each_change_has_one_forecast() {
    let Some(pair) = Pair::start().await else { return };
    pair.put(&pair.first, NETWORK, &settings()).await;
    let mut database = PgConnection::connect(&pair.url).await.unwrap();
    let days: Vec<f64> = (0..5u32).map(|round| 60.0 + 10.0 * f64::from(round)).collect();
    for (place, counts) in grown(&days, |_| (50.0, 3.0)).iter().enumerate() {
        let (here, there) = if place % 2 == 0 { (&pair.first, &pair.second) } else { (&pair.second, &pair.first) };
        let before = pair.latest_run(&mut database).await;
        let path = format!("{NETWORK}/snapshots/2026-{:02}-01", place + 1);
        let body = json!({"degree_counts": pairs(counts)});
        pair.put(here, &path, &body).await;
        assert_eq!(pair.read(there, &path).await["degree_counts"], body["degree_counts"]);
        let begun = Instant::now();
        let made = loop {
            let now = pair.latest_run(&mut database).await;
            if now != before {
                break now.unwrap();
            }
            assert!(begun.elapsed() < Duration::from_secs(60), "no forecast follows");
            // Polled all the while, so that both hold copies of the one before.
            for served in [here, there] {
                pair.get(served, &format!("{NETWORK}/forecasts/latest")).await;
            }
        };
        // A copy is a second old at most; the rest is the machine's.
        tokio::time::sleep(Duration::from_millis(1_100)).await;
        for served in [here, there] {
            let latest = pair.read(served, &format!("{NETWORK}/forecasts/latest")).await;
            assert_eq!(latest["id"], made, "a second after it was stored");
        }
    }
    let twice = "SELECT count(*) FROM (SELECT revision FROM network_runs WHERE issued_to IS NOT NULL GROUP BY revision \
                 HAVING count(*) > 1) AS twice";
    assert_eq!(pair.count(twice).await, 0, "no revision has two forecasts");
    assert_eq!(pair.count("SELECT count(*) FROM network_runs WHERE issued_to IS NOT NULL").await, 5);
    assert_eq!(pair.count("SELECT count(*) FROM networks WHERE revision = refreshed").await, 1);
}

#[tokio::test(flavor = "multi_thread")]
async fn one_key_sent_to_both_at_once_makes_one_run() {
    let Some(pair) = Pair::start().await else { return };
    for round in 0..8 {
        let body = changed(fit_body(), "/fixed", json!({"preferential_share": 0.7}));
        let body = changed(body, "/label", json!(format!("round {round}")));
        let send = async |served: &Served| {
            let post = pair.client.post(format!("http://{}/v1/fits", served.address)).json(&body);
            let answer = post.header("idempotency-key", format!("round-{round}")).send().await.unwrap();
            (answer.status().as_u16(), answer.text().await.unwrap())
        };
        let (one, other) = tokio::join!(send(&pair.first), send(&pair.second));
        assert_eq!((one.0, &one), (201, &other));
        let page = pair.read(&pair.second, &format!("/v1/fits?label=round%20{round}")).await;
        assert_eq!(page["items"].as_array().unwrap().len(), 1);
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn what_a_killed_one_was_at_the_other_ends_once() {
    let Some(mut pair) = Pair::start().await else { return };
    pair.put_months(10).await;
    pair.put(&pair.first, "/v1/networks/lists", &json!({"degree_kind": "received"})).await;
    let list = pair.client.put(format!("http://{}/v1/networks/lists/links?every=P1M", pair.first.address));
    let list = list.header("content-type", "text/csv").header("prefer", "respond-async").body(link_list(20_000));
    let backtest = pair.backtest_at(&pair.first).await;
    pair.job_when(&pair.first, &backtest, |job| job["state"] == "running").await;
    // Taken on behind the backtest: it is waiting, or just begun, when its process is killed.
    let list = list.send().await.unwrap();
    assert!(list.status().is_success());
    let list = list.json::<Value>().await.unwrap()["id"].as_str().unwrap().to_owned();
    pair.first.child.kill().unwrap();
    pair.first.child.wait().unwrap();
    for id in [&backtest, &list] {
        let job = pair.job_when(&pair.second, id, |job| !is_live(job)).await;
        assert_eq!(job["state"], "succeeded", "{job}");
    }
    let made = pair.read(&pair.second, &format!("{NETWORK}/backtests")).await;
    let made: Vec<&Value> = made["items"].as_array().unwrap().iter().map(|line| &line["id"]).collect();
    assert_eq!(made, [&json!(backtest)]);
    let kept = pair.read(&pair.second, "/v1/networks/lists/snapshots?limit=200").await;
    let nodes: BTreeSet<u64> =
        kept["items"].as_array().unwrap().iter().filter_map(|line| line["nodes"].as_u64()).collect();
    assert_eq!(nodes.last(), Some(&20_001), "{kept}");
    assert_eq!(pair.count("SELECT count(*) FROM spooled_parts").await, 0, "the list is not kept longer than its job");
    assert_eq!(pair.count("SELECT count(*) FROM backtest_records").await, 0);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_job_called_off_at_the_other_ends_and_makes_way() {
    let Some(pair) = Pair::start().await else { return };
    pair.put_months(10).await;
    let job = pair.backtest_at(&pair.first).await;
    pair.job_when(&pair.second, &job, |job| job["state"] == "running").await;
    let off = pair.client.delete(format!("http://{}/v1/jobs/{job}", pair.second.address)).send().await.unwrap();
    assert_eq!(off.status(), 204);
    for served in [&pair.first, &pair.second] {
        assert_eq!(pair.read(served, &format!("/v1/jobs/{job}")).await["state"], "cancelled");
    }
    let next = pair.backtest_at(&pair.second).await;
    let ended = pair.job_when(&pair.second, &next, |job| !is_live(job)).await;
    assert_eq!(ended["state"], "succeeded", "{ended}");
    assert_eq!(pair.count("SELECT count(*) FROM backtests").await, 1);
    assert_eq!(pair.read(&pair.first, &format!("/v1/jobs/{job}")).await["state"], "cancelled");
}

/// The kill loop in small; `studies/kills.txt` has the long one.
fn killed_ten_times(database: &[&str]) {
    let folder = tempfile::tempdir().unwrap();
    let mut kills = Command::new("python3");
    kills.arg(concat!(env!("CARGO_MANIFEST_DIR"), "/tests/kills.py")).arg(command(folder.path()).get_program());
    match kills.args(["--kills", "10"]).args(database).output() {
        Ok(told) => {
            let text = [told.stdout, told.stderr].map(|bytes| String::from_utf8_lossy(&bytes).into_owned()).concat();
            assert!(told.status.success() && text.contains("10 kills"), "{text}");
        }
        Err(error) => eprintln!("NOT RUN: the kill loop {database:?} needs python3: {error}"),
    }
}

#[test]
fn ten_kills_lose_and_double_nothing_on_a_file() {
    killed_ten_times(&[]);
}

#[test]
fn ten_kills_of_three_replicas_lose_and_double_nothing() {
    if Server::given_or_own().is_some() && Command::new("psql").arg("--version").output().is_ok() {
        killed_ten_times(&["--postgres"]);
    } else {
        eprintln!("NOT RUN: the kill loop of replicas needs PostgreSQL's server and psql");
    }
}

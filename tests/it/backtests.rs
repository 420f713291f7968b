//! Backtests: what they answer, what they refuse, how they end, are taken up again, and are redone.

use std::path::Path;
use std::time::{Duration, Instant};

use reqwest::Method;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};
use tailcast::model::DegreeCounts;

use crate::harness::{Answer, Service, answered, csv, json_text};
use crate::jobs::ended;
use crate::tracking::{grown, put_counts, settings, settled};

const NETWORK: &str = "/v1/networks/heronsgate";
const BACKTESTS: &str = "/v1/networks/heronsgate/backtests";
const DATES: [&str; 12] = [
    "2026-01-01",
    "2026-02-01",
    "2026-03-01",
    "2026-04-01",
    "2026-05-01",
    "2026-06-01",
    "2026-07-01",
    "2026-08-01",
    "2026-09-01",
    "2026-10-01",
    "2026-11-01",
    "2026-12-01",
];

fn monthly(snapshots: usize) -> Vec<DegreeCounts> {
    let days: Vec<f64> = (0..snapshots).map(|month| 60.0 + 30.0 * month as f64).collect();
    grown(&days, |_| (20.0, 3.0))
}

pub async fn with_snapshots(service: &Service, network: &Value, snapshots: usize) {
    service.put(NETWORK, network).await.expect(201);
    for (date, counts) in DATES.iter().zip(monthly(snapshots)) {
        put_counts(service, date, &counts).await;
    }
}

async fn ask(service: &Service, body: &Value, headers: &[(&str, &str)]) -> Answer {
    let request = service.request(Method::POST, BACKTESTS).json(body);
    answered(headers.iter().fold(request, |request, &(name, value)| request.header(name, value))).await
}

/// A connection of the test's own to the database of a folder.
async fn database(folder: &Path) -> SqliteConnection {
    SqliteConnection::connect(&format!("sqlite://{}", folder.join("it.db").display())).await.unwrap()
}

async fn service_in(folder: &Path) -> Service {
    let url = format!("sqlite://{}", folder.join("it.db").display());
    Service::start_with(move |config| {
        config.database.url = url;
        config.jobs.wait_seconds = 100;
    })
    .await
}

async fn records(database: &mut SqliteConnection) -> i64 {
    sqlx::query_scalar("SELECT count(*) FROM backtest_records").fetch_one(database).await.unwrap()
}

/// A service in `folder` at work on a backtest of a network of twelve months; the database, and the job's address.
async fn at_work_in(folder: &Path) -> (Service, SqliteConnection, String) {
    let service = service_in(folder).await;
    with_snapshots(&service, &json!({"degree_kind": "received"}), 12).await;
    let mut connection = database(folder).await;
    let location = at_work(&service, &mut connection).await;
    (service, connection, location)
}

/// Takes a backtest on and waits until it has its first record; returns the job's address.
async fn at_work(service: &Service, database: &mut SqliteConnection) -> String {
    let taken = ask(service, &json!({"thresholds": [3, 10]}), &[("prefer", "respond-async")]).await.expect(202);
    assert_eq!(taken.header("preference-applied"), "respond-async");
    assert_eq!(taken.json()["kind"], "backtest");
    let begun = Instant::now();
    while records(database).await == 0 {
        assert!(begun.elapsed() < Duration::from_secs(60));
        tokio::time::sleep(Duration::from_millis(5)).await;
    }
    taken.header("location").to_owned()
}

#[tokio::test(flavor = "multi_thread")]
async fn a_backtest_scores_every_origin_and_is_kept() {
    let folder = tempfile::tempdir().unwrap();
    let service = service_in(folder.path()).await;
    with_snapshots(&service, &json!({"degree_kind": "received"}), 6).await;
    let made = ask(&service, &json!({"thresholds": [10, 3], "ahead": 2, "levels": [0.8]}), &[]).await.expect(201);
    let (location, run) = (made.header("location").to_owned(), made.json());
    assert_eq!(location, format!("/v1/backtests/{}", run["id"].as_str().unwrap()));
    assert_eq!((&run["network"], &run["ahead"]), (&json!("heronsgate"), &json!(2)));
    assert_eq!((&run["thresholds"], &run["levels"]), (&json!([3, 10]), &json!([0.8])));
    assert_eq!((&run["snapshots"], &run["origins"]), (&json!(DATES[..6]), &json!(DATES[1..5])));
    for table in ["given", "expected"] {
        let rows = run[table].as_array().unwrap();
        let places: Vec<(u64, Option<u64>, u64)> = rows
            .iter()
            .map(|row| {
                let number = |field: &str| row[field].as_u64();
                (number("periods_ahead").unwrap(), number("threshold"), number("cases").unwrap())
            })
            .collect();
        // Four origins have a snapshot after them, three have two.
        let expected =
            [(1, None, 8), (1, Some(3), 4), (1, Some(10), 4), (2, None, 6), (2, Some(3), 3), (2, Some(10), 3)];
        assert_eq!(places, expected, "{table}");
        for row in rows {
            let error = row["pooled"]["mean_log_error"].as_f64().unwrap();
            assert!(error > 0.0 && error < 0.5, "{row}");
            assert!(row["pooled"]["crps"].as_f64().unwrap() > 0.0, "{row}");
            let best = row["members"].as_array().unwrap().iter().find(|m| m["member"] == row["best_trend"]).unwrap();
            let skill = 1.0 - error / best["mean_log_error"].as_f64().unwrap();
            assert!((row["skill"].as_f64().unwrap() - skill).abs() < 1e-12, "{row}");
            let coverage = &row["coverage"][0];
            assert_eq!((&coverage["level"], &coverage["cases"]), (&json!(0.8), &row["cases"]));
            let [share, low, high] = ["share", "low", "high"].map(|field| coverage[field].as_f64().unwrap());
            assert!(low <= share && share <= high, "{row}");
        }
    }
    let verdict = run["verdict"].as_str().unwrap();
    for words in
        ["judges the mechanism", "judges the whole", "best plain trend", "of 8 outcomes lay inside the 80 % interval"]
    {
        assert!(verdict.contains(words), "{verdict}");
    }
    assert_eq!(run["pools"].as_array().unwrap().len(), 1, "the newest origin has one snapshot after it");
    assert!(run["cautions"].as_array().unwrap().iter().any(|c| c.as_str().unwrap().contains("harm people")));

    let read = service.get(&location).await.expect(200);
    assert_eq!((read.text.as_str(), read.header("backtest-state")), (made.text.as_str(), "current"));
    let unchanged = service.get_with(&location, "if-none-match", read.header("etag")).await.expect(304);
    assert_eq!(unchanged.header("backtest-state"), "current");
    let table = service.get_with(&location, "accept", "text/csv").await.expect(200).text;
    let mut lines = table.lines();
    assert!(lines.next().unwrap().starts_with(
        "table,periods_ahead,threshold,member,cases,mean_log_error,mean_absolute_error,crps,inside_80,share_80,low_80,high_80"
    ));
    let members: usize = ["given", "expected"]
        .iter()
        .flat_map(|table| run[table].as_array().unwrap())
        .map(|row| 1 + row["members"].as_array().unwrap().len())
        .sum();
    assert_eq!(lines.count(), members);
    assert!(table.contains("\nexpected,2,10,trend_per_arrival,3,"), "{table}");
    assert_eq!(service.get(&format!("{location}?format=csv")).await.expect(200).text, table);

    let second = ask(&service, &json!({"thresholds": [3], "ahead": 1}), &[]).await.expect(201).json();
    assert_eq!(second["levels"], json!([0.5, 0.9]));
    let page = service.get(&format!("{BACKTESTS}?limit=1")).await.expect(200);
    let line = &page.json()["items"][0];
    assert_eq!((&line["id"], &line["ahead"], &line["outdated"]), (&second["id"], &json!(1), &json!(false)));
    let next = page.header("link").trim_start_matches('<').split('>').next().unwrap().to_owned();
    let page = service.get(&next).await.expect(200);
    assert_eq!((&page.json()["items"][0]["id"], page.header("link")), (&run["id"], ""));
    let job = service.get(&format!("/v1/jobs/{}", run["id"].as_str().unwrap())).await.expect(200).json();
    assert_eq!(job["result"], json!({"backtest": run["id"], "origins": 4}));

    service.delete_if(&location, "\"other\"").await.expect(412);
    service.send(Method::DELETE, &location).await.expect(204);
    service.get(&location).await.expect_problem(404, "not_found");
    service.send(Method::DELETE, &location).await.expect_problem(404, "not_found");
    service.send(Method::DELETE, NETWORK).await.expect(204);
    service.get(&format!("/v1/backtests/{}", second["id"].as_str().unwrap())).await.expect(404);
}

#[tokio::test]
async fn what_cannot_be_tested_is_refused_with_what_would_help() {
    let service = Service::start_with(|config| config.jobs.wait_seconds = 100).await;
    ask(&service, &json!({}), &[]).await.expect_problem(404, "not_found");
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let thresholds = json!({"thresholds": [3]});
    ask(&service, &thresholds, &[]).await.expect_problem(422, "no_snapshot");
    for (i, counts) in monthly(3).iter().enumerate() {
        let few = ask(&service, &thresholds, &[]).await;
        if i > 0 {
            let few = few.expect_problem(422, "impossible").json();
            assert!(few["detail"].as_str().unwrap().contains("at least 3 snapshots"), "{few}");
        }
        put_counts(&service, DATES[i], counts).await;
    }
    for (body, place) in [
        (json!({}), ""),
        (json!({"thresholds": [0]}), "/thresholds/0"),
        (json!({"thresholds": [3], "ahead": 0}), "/ahead"),
        (json!({"thresholds": [3], "ahead": 13}), "/ahead"),
        (json!({"thresholds": [3], "ahead": "2"}), "/ahead"),
        (json!({"thresholds": [3], "levels": [1.5]}), "/levels/0"),
        (json!({"thresholds": [3], "model": "mix"}), "/model"),
    ] {
        let refused = ask(&service, &body, &[]).await.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [place], "{body}");
    }
    let typed = service.request(Method::POST, BACKTESTS).header("content-type", "text/csv").body(csv("3").1);
    answered(typed).await.expect_problem(415, "unsupported_media_type");
    service.get(&format!("{BACKTESTS}?cursor=3")).await.expect_problem(400, "invalid_request");
    assert_eq!(service.get(BACKTESTS).await.expect(200).json()["items"], json!([]));
    // Without a body: what the plan says.
    service.put(NETWORK, &settings()).await.expect(200);
    let made = answered(service.request(Method::POST, BACKTESTS)).await.expect(201).json();
    assert_eq!((&made["thresholds"], &made["ahead"]), (&json!([5, 10, 20]), &json!(3)));
    assert!(made["verdict"].as_str().unwrap().contains("One origin is an anecdote"), "{made}");
}

#[tokio::test]
async fn more_forecasts_than_configured_are_refused() {
    let service = Service::start_with(|config| config.limits.cells = 11).await;
    with_snapshots(&service, &json!({"degree_kind": "received"}), 4).await;
    let refused = ask(&service, &json!({"thresholds": [3, 5]}), &[]).await.expect_problem(400, "invalid_request");
    assert_eq!(refused.places(), ["/thresholds"]);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_backtest_that_is_called_off_leaves_nothing() {
    let folder = tempfile::tempdir().unwrap();
    let (service, mut database, location) = at_work_in(folder.path()).await;
    let again = ask(&service, &json!({"thresholds": [3]}), &[]).await.expect_problem(409, "job_live");
    assert!(again.json()["detail"].as_str().unwrap().contains(&location), "{again:?}");
    service.send(Method::DELETE, &location).await.expect(204);
    assert_eq!(records(&mut database).await, 0);
    assert_eq!(ended(&service, &location).await["state"], "cancelled");
    // The place is free when the work has stopped, and the one before left no trace.
    let made = ask(&service, &json!({"thresholds": [3], "ahead": 1}), &[]).await.expect(201).json();
    let list = service.get(BACKTESTS).await.expect(200).json();
    assert_eq!(list["items"].as_array().unwrap().len(), 1);
    assert_eq!(list["items"][0]["id"], made["id"]);
    assert_eq!(records(&mut database).await, 0);
}

/// The next process goes on where the one before stopped; whether a record was computed again is told by a mark in it.
#[tokio::test(flavor = "multi_thread")]
async fn a_restart_goes_on_from_the_records_that_are_kept() {
    let folder = tempfile::tempdir().unwrap();
    let (service, mut connection, location) = at_work_in(folder.path()).await;
    service.stop().await;
    let before = records(&mut connection).await;
    assert!((1..10).contains(&before), "{before}");
    mark(&mut connection).await;
    connection.close().await.unwrap();
    let service = service_in(folder.path()).await;
    assert_eq!(ended(&service, &location).await["state"], "succeeded");
    let id = location.rsplit('/').next().unwrap();
    let run = service.get(&format!("/v1/backtests/{id}")).await.expect(200).json();
    assert_eq!(run["origins"].as_array().unwrap().len(), 10);
    assert_eq!(run["origins"][0], "2020-01-01", "the kept record was used");
    assert_eq!(run["origins"][9], DATES[10]);
    assert_eq!(records(&mut database(folder.path()).await).await, 0);
}

/// Records of evidence that is stored no more are of no use.
#[tokio::test(flavor = "multi_thread")]
async fn a_change_while_it_is_at_work_makes_a_backtest_begin_anew() {
    let folder = tempfile::tempdir().unwrap();
    let (service, mut connection, location) = at_work_in(folder.path()).await;
    service.stop().await;
    mark(&mut connection).await;
    // As a correction by another process would leave it.
    sqlx::query("DELETE FROM snapshots WHERE as_of LIKE '2026-12-01%'").execute(&mut connection).await.unwrap();
    connection.close().await.unwrap();
    let other = monthly(12).remove(11);
    let service = service_in(folder.path()).await;
    put_counts(&service, "2026-11-16", &other).await;
    assert_eq!(ended(&service, &location).await["state"], "succeeded");
    let id = location.rsplit('/').next().unwrap();
    let read = service.get(&format!("/v1/backtests/{id}")).await.expect(200);
    assert_eq!(read.header("backtest-state"), "current");
    let mut dates = DATES[..11].to_vec();
    dates.push("2026-11-16");
    assert_eq!(read.json()["snapshots"], json!(dates));
    assert_eq!(read.json()["origins"], json!(dates[1..11]), "no marked record was used");
}

/// Gives the first record that is kept a date that no origin has.
async fn mark(connection: &mut SqliteConnection) {
    let marked = sqlx::query(
        "UPDATE backtest_records SET record = replace(record, '\"as_of\":\"2026-02-01\"', '\"as_of\":\"2020-01-01\"') \
         WHERE origin = 1 AND record LIKE '%\"as_of\":\"2026-02-01\"%'",
    );
    assert_eq!(marked.execute(connection).await.unwrap().rows_affected(), 1);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_correction_makes_a_backtest_outdated_and_has_it_redone() {
    let folder = tempfile::tempdir().unwrap();
    let service = service_in(folder.path()).await;
    with_snapshots(&service, &settings(), 5).await;
    settled(&service).await;
    let made = ask(&service, &json!({"thresholds": [3, 10], "ahead": 1}), &[]).await.expect(201);
    let location = made.header("location").to_owned();
    let lines = async || service.get(BACKTESTS).await.expect(200).json()["items"].as_array().unwrap().clone();
    // Another plan changes nothing that a backtest stands on.
    let mut plan = settings();
    plan["forecast_plan"]["thresholds"] = json!([7]);
    service.put(NETWORK, &plan).await.expect(200);
    settled(&service).await;
    assert_eq!(service.get(&location).await.expect(200).header("backtest-state"), "current");
    // A new snapshot outdates it, but what was tested stands.
    let counts = monthly(6);
    put_counts(&service, DATES[5], &counts[5]).await;
    settled(&service).await;
    let read = service.get(&location).await.expect(200);
    assert_eq!((read.header("backtest-state"), &read.text), ("outdated", &made.text));
    let before = lines().await;
    assert_eq!((before.len(), &before[0]["outdated"]), (1, &json!(true)));
    assert_eq!(before[0]["evidence_corrected_at"], Value::Null);
    // A correction has it redone, once, as it was asked for.
    put_counts(&service, DATES[2], &counts[1]).await.expect(200);
    settled(&service).await;
    let after = lines().await;
    assert_eq!(after.len(), 2, "{after:?}");
    assert_eq!((&after[0]["outdated"], &after[1]["outdated"]), (&json!(false), &json!(true)));
    assert!(after[1]["evidence_corrected_at"].is_string() && after[0]["evidence_corrected_at"].is_null(), "{after:?}");
    assert_eq!((&after[0]["thresholds"], &after[0]["ahead"]), (&json!([3, 10]), &json!(1)));
    let redone = service.get(&format!("/v1/backtests/{}", after[0]["id"].as_str().unwrap())).await.expect(200).json();
    assert_eq!(redone["snapshots"].as_array().unwrap().len(), 6);
    service.put_with(NETWORK, json_text(&settings()), &[]).await.expect(200);
    settled(&service).await;
    assert_eq!(lines().await.len(), 2, "no redo without a correction");
}

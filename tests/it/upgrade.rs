//! Databases of earlier versions, with what was kept in them: opened, brought up to date, and answered from.

use std::path::Path;
use std::str::FromStr;

use serde_json::json;
use sqlx::sqlite::SqliteConnectOptions;
use sqlx::{ConnectOptions, Connection, SqliteConnection};

use crate::harness::{COUNTS, Service, pairs};

const ID: &str = "0190a0b0-0000-7000-8000-000000000001";
/// As the first version answered a fit: no verdict, no losses, no parameter of a candidate.
const DOCUMENT: &str = r#"{"id":"0190a0b0-0000-7000-8000-000000000001","created_at":"2026-06-01T00:00:00Z","network":null,"label":"old","engine":"tailcast 0.1.0","seed":1,"inputs_digest":"sha-256:0000000000000000000000000000000000000000000000000000000000000000","fit":{"model":"mix","evidence":"one_snapshot","preferential_share":{"estimate":0.7,"low":0.6,"high":0.8,"level":0.9},"links_per_arrival":{"estimate":3.0,"low":null,"high":null,"level":null},"arrivals_per_day":null,"tail_exponent":null,"entry_degrees":[[0,1.0]],"candidates":[{"model":"mix","preferential_share":0.7,"log_likelihood":-1.0,"aic":4.0,"weight":1.0}],"goodness":null},"tail":[{"degree":1,"observed":5,"fitted":5.5}],"warnings":[],"cautions":[]}"#;

/// A database after these migrations, and its address.
async fn database(folder: &Path, migrations: &[&str]) -> (SqliteConnection, String) {
    let url = format!("sqlite://{}", folder.join("old.db").display());
    let earlier = folder.join("migrations");
    std::fs::create_dir(&earlier).unwrap();
    for name in migrations {
        std::fs::copy(Path::new(env!("CARGO_MANIFEST_DIR")).join("migrations").join(name), earlier.join(name)).unwrap();
    }
    let options = SqliteConnectOptions::from_str(&url).unwrap().create_if_missing(true).foreign_keys(true);
    let mut database = options.connect().await.unwrap();
    sqlx::migrate::Migrator::new(earlier.as_path())
        .await
        .unwrap()
        .run_direct(None, &mut database, false)
        .await
        .unwrap();
    (database, url)
}

#[tokio::test]
async fn a_run_of_the_first_version_is_read_in_every_form() {
    let folder = tempfile::tempdir().unwrap();
    let (mut database, url) = database(folder.path(), &["0001_runs.sql"]).await;
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
    let run = service.get_older(&format!("/v1/fits/{ID}")).await;
    assert_eq!((run.status, run.text.as_str()), (200, DOCUMENT));
    let table = service.get(&format!("/v1/fits/{ID}?format=csv")).await;
    assert_eq!(table.status, 200, "{}", table.text);
    assert!(table.text.contains("1,5,5.5"), "{}", table.text);
    assert_eq!(service.get("/v1/networks").await.status, 200);
    service.stop().await;
}

/// A network of the third version with a job that has ended and one that has not: all of it is kept, and the network can be
/// given a plan.
#[tokio::test]
async fn a_network_of_the_third_version_keeps_its_evidence_and_jobs() {
    let folder = tempfile::tempdir().unwrap();
    let (mut database, url) = database(folder.path(), &["0001_runs.sql", "0002_networks.sql", "0003_jobs.sql"]).await;
    let counts = pairs(&COUNTS[1]).to_string();
    let tag = tailcast::service::sha256_hex(counts.as_bytes());
    let problem = r#"{"problem":{"code":"invalid_request","detail":"old","errors":[]}}"#;
    for (statement, values) in [
        (
            "INSERT INTO networks (name, degree_kind, tag, created_at, updated_at) VALUES ('heronsgate', 'received', $1, 5, 6)",
            vec![tag.as_str()],
        ),
        (
            "INSERT INTO snapshots (network, as_of, nodes, link_ends, largest_degree, row_count, tag, updated_at, degree_counts) \
             VALUES ('heronsgate', '2026-06-01T00:00:00.000000000Z', '4520', '9000', 99, 50, $1, 7, $2)",
            vec![tag.as_str(), counts.as_str()],
        ),
        (
            "INSERT INTO jobs (id, kind, network, state, starts, created_at, ended_at, task, outcome) \
             VALUES ($1, 'link_list', 'heronsgate', 'failed', 1, 5, 6, '{}', $2)",
            vec![ID, problem],
        ),
        (
            "INSERT INTO jobs (id, kind, network, state, starts, created_at, task) \
             VALUES ($1, 'link_list', 'heronsgate', 'running', 3, 5, '{}')",
            vec!["0190a0b0-0000-7000-8000-000000000002"],
        ),
    ] {
        let query = values.into_iter().fold(sqlx::query(statement), |query, value| query.bind(value));
        query.execute(&mut database).await.unwrap();
    }
    database.close().await.unwrap();

    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let jobs = service.get("/v1/jobs?network=heronsgate").await.expect(200).json();
    assert_eq!(jobs["items"].as_array().unwrap().len(), 2, "{jobs}");
    let old = service.get(&format!("/v1/jobs/{ID}")).await.expect(200).json();
    assert_eq!(
        (&old["kind"], &old["state"], &old["problem"]["detail"]),
        (&json!("link_list"), &json!("failed"), &json!("old"))
    );
    let network = service.get("/v1/networks/heronsgate").await.expect(200);
    assert_eq!(
        (network.header("etag"), &network.json()["forecast_plan"]),
        (format!("\"{tag}\"").as_str(), &json!(null))
    );
    let snapshot = service.get("/v1/networks/heronsgate/snapshots/2026-06-01").await.expect(200);
    assert_eq!(snapshot.json()["degree_counts"], pairs(&COUNTS[1]));
    service.put("/v1/networks/heronsgate", &crate::tracking::settings()).await.expect(200);
    assert_eq!(crate::tracking::settled(&service).await["refresh"]["state"], "current");
    service.get_older("/v1/networks/heronsgate/forecasts/latest").await.expect(200);
    service.stop().await;
}

/// A network of the fourth version, which knew no backtests, can be tested from what it kept.
#[tokio::test]
async fn a_network_of_the_fourth_version_can_be_backtested() {
    let folder = tempfile::tempdir().unwrap();
    let migrations = ["0001_runs.sql", "0002_networks.sql", "0003_jobs.sql", "0004_tracking.sql"];
    let (mut database, url) = database(folder.path(), &migrations).await;
    let tag = tailcast::service::sha256_hex(b"settings");
    sqlx::query(
        "INSERT INTO networks (name, degree_kind, tag, created_at, updated_at, revision) \
         VALUES ('heronsgate', 'received', $1, 5, 6, 3)",
    )
    .bind(tag)
    .execute(&mut database)
    .await
    .unwrap();
    let grown = crate::tracking::grown(&[60.0, 90.0, 120.0], |_| (20.0, 3.0));
    for (month, counts) in grown.iter().enumerate() {
        let text = pairs(counts).to_string();
        sqlx::query(
            "INSERT INTO snapshots (network, as_of, nodes, link_ends, largest_degree, row_count, tag, updated_at, degree_counts, \
             revision) VALUES ('heronsgate', $1, $2, $3, 99, 50, $4, 7, $5, 2)",
        )
        .bind(format!("2026-{:02}-01T00:00:00.000000000Z", month + 1))
        .bind(counts.nodes().to_string())
        .bind(counts.link_ends().to_string())
        .bind(tailcast::service::sha256_hex(text.as_bytes()))
        .bind(text)
        .execute(&mut database)
        .await
        .unwrap();
    }
    database.close().await.unwrap();

    let service = Service::start_with(|config| {
        config.database.url = url.clone();
        config.jobs.wait_seconds = 100;
    })
    .await;
    let path = "/v1/networks/heronsgate/backtests";
    assert_eq!(service.get(path).await.expect(200).json()["items"], json!([]));
    let made = service.post(path, &json!({"thresholds": [3]})).await.expect(201).json();
    assert_eq!(made["origins"], json!(["2026-02-01"]));
    service.stop().await;
}

/// A network of the fifth version, which knew no questions, with a forecast that has none in its document: the document is answered
/// as it is, a limit can be kept and waits for the next forecast.
#[tokio::test]
async fn a_network_of_the_fifth_version_keeps_its_forecast_and_takes_limits() {
    let folder = tempfile::tempdir().unwrap();
    let made = {
        let service = Service::start().await;
        service.post("/v1/forecasts", &crate::harness::forecast_body()).await.expect(201)
    };
    let mut document = made.json();
    for field in ["bands", "watch", "next_hubs", "scenarios"] {
        document.as_object_mut().unwrap().remove(field).unwrap();
    }
    document["network"] = json!("heronsgate");
    let (id, document) = (document["id"].as_str().unwrap().to_owned(), document.to_string());
    let migrations = ["0001_runs.sql", "0002_networks.sql", "0003_jobs.sql", "0004_tracking.sql", "0005_backtests.sql"];
    let (mut database, url) = database(folder.path(), &migrations).await;
    let tag = tailcast::service::sha256_hex(b"settings");
    let plan = r#"{"thresholds":[10],"horizon":{"ends_after":"P2M","every":"P1M"},"levels":[0.5,0.9]}"#;
    for (statement, values) in [
        (
            "INSERT INTO networks (name, degree_kind, tag, created_at, updated_at, revision, forecast_plan, refresh_state, refresh_job) \
             VALUES ('heronsgate', 'received', $1, 5, 6, 3, $2, 'current', $3)",
            vec![tag.as_str(), plan, ID],
        ),
        (
            "INSERT INTO runs (id, kind, label, created_at, engine, seed, inputs_digest, tag, document, inputs) \
             VALUES ($1, 'forecast', 'old', 1780272000000000, 'tailcast 0.1.0', 1, 'sha-256:' || $2, $2, $3, '{}')",
            vec![id.as_str(), tag.as_str(), document.as_str()],
        ),
        (
            "INSERT INTO latest_forecasts (network, run_id, state, job, created_at, tag, document) \
             VALUES ('heronsgate', $1, 'current', $2, 1780272000000000, $3, $4)",
            vec![id.as_str(), ID, tag.as_str(), document.as_str()],
        ),
    ] {
        let query = values.into_iter().fold(sqlx::query(statement), |query, value| query.bind(value));
        query.execute(&mut database).await.unwrap();
    }
    database.close().await.unwrap();

    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let latest = service.get_older("/v1/networks/heronsgate/forecasts/latest").await.expect(200);
    assert_eq!(latest.text, document);
    for part in ["tail", "limits", "bands", "scenarios"] {
        let table = service.get(&format!("/v1/forecasts/{id}?format=csv&part={part}")).await.expect(200);
        assert_eq!(table.text.lines().count() > 1, part == "tail", "{}", table.text);
    }
    let path = "/v1/networks/heronsgate/limits/fan-out";
    let limit = json!({"threshold": 10, "max_nodes": 20, "by": "2027-01-01"});
    assert_eq!(service.put(path, &limit).await.expect(201).json()["answer"], json!(null));
    crate::tracking::settled(&service).await;
    assert_eq!(service.get(path).await.expect(200).json()["state"], "waiting", "nothing is stored to start from");
    service.stop().await;
}

/// A network of the sixth version, which knew no notices, with a limit that waits for its first forecast: both are kept, and what the
/// forecast says of the limit is told.
#[tokio::test]
async fn a_network_of_the_sixth_version_keeps_its_limit_and_takes_notices() {
    let folder = tempfile::tempdir().unwrap();
    let migrations = [
        "0001_runs.sql",
        "0002_networks.sql",
        "0003_jobs.sql",
        "0004_tracking.sql",
        "0005_backtests.sql",
        "0006_questions.sql",
    ];
    let (mut database, url) = database(folder.path(), &migrations).await;
    let tag = tailcast::service::sha256_hex(b"anything");
    for statement in [
        "INSERT INTO networks (name, degree_kind, tag, created_at, updated_at, revision) VALUES ('heronsgate', 'received', $1, 5, 6, 3)",
        "INSERT INTO kept_questions (network, kind, name, created_at, updated_at, tag, body) VALUES ('heronsgate', 'limit', 'fan-out', \
         5, 6, $1, '{\"threshold\":10,\"max_nodes\":1,\"by\":\"2026-08-01\",\"risk\":0.1}')",
    ] {
        sqlx::query(statement).bind(&tag).execute(&mut database).await.unwrap();
    }
    database.close().await.unwrap();

    let receiver = crate::notice_receiver::Receiver::start().await;
    let service = Service::start_with(|config| {
        config.database.url = url.clone();
        crate::notices::sends(config, &[&receiver.origin()]);
    })
    .await;
    assert_eq!(service.get("/v1/networks/heronsgate/notices").await.expect(200).json()["items"], json!([]));
    service.put("/v1/networks/heronsgate/notices/on-call", &json!({"url": receiver.hook()})).await.expect(201);
    crate::tracking::put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    service.put("/v1/networks/heronsgate", &crate::tracking::settings()).await.expect(200);
    let event = receiver.wait_for(1).await[0].event();
    assert_eq!(
        (&event["type"], &event["data"]["limit"]["name"]),
        (&json!("tailcast.limit.risk_passed"), &json!("fan-out"))
    );
    service.stop().await;
}

//! Health, readiness, metrics, pages, tracing, a stop in good order.

use std::time::Duration;

use reqwest::Method;
use serde_json::json;
use sqlx::{Connection, Executor, SqliteConnection};

use tokio::io::{AsyncReadExt, AsyncWriteExt};

use crate::harness::{Service, answered, fit_body, forecast_body};

#[tokio::test]
async fn probes_answer() {
    let service = Service::start().await;
    assert_eq!(service.get("/livez").await.expect(200).text, "alive\n");
    assert_eq!(service.get("/readyz").await.expect(200).text, "ready\n");
}

#[tokio::test]
async fn it_is_not_ready_before_its_tables_are_made() {
    let service = Service::start_with(|config| config.database.migrate_on_start = false).await;
    service.get("/livez").await.expect(200);
    let answer = service.get("/readyz").await.expect_problem(503, "not_ready");
    assert!(answer.text.contains("migrate"), "{}", answer.text);
    for (path, body) in [("/v1/fits", fit_body()), ("/v1/forecasts", forecast_body())] {
        service.post(path, &body).await.expect_problem(503, "not_ready");
        service.get(path).await.expect_problem(503, "not_ready");
    }
}

#[tokio::test]
async fn metrics_name_routes_not_paths() {
    let service = Service::start().await;
    service.post("/v1/fits", &fit_body()).await.expect(201);
    service.get("/v1/fits/typed-by-a-client").await.expect(404);
    service.get("/typed/by/a/client").await.expect(404);
    let metrics = service.get("/metrics").await.expect(200);
    assert!(metrics.header("content-type").starts_with("text/plain; version=0.0.4"));
    for line in [
        "tailcast_http_requests_total{method=\"POST\",route=\"/v1/fits\",status=\"201\"}",
        "tailcast_http_requests_total{method=\"GET\",route=\"/v1/fits/{id}\",status=\"404\"}",
        "tailcast_http_requests_total{method=\"GET\",route=\"unmatched\",status=\"404\"}",
        "tailcast_compute_seconds_count",
        "tailcast_build_info",
    ] {
        assert!(metrics.text.contains(line), "{line}");
    }
    assert!(!metrics.text.contains("typed"));
}

#[tokio::test]
async fn pages_load_nothing_from_elsewhere() {
    let service = Service::start().await;
    for (path, policy) in
        [("/", "default-src 'none'; script-src 'self'; style-src 'self'"), ("/docs/", "default-src 'self'")]
    {
        let page = service.get(path).await.expect(200);
        assert!(page.header("content-security-policy").starts_with(policy), "{path}");
        assert!(!page.text.contains("//cdn") && !page.text.contains("src=\"http"), "{path}: {}", page.text);
    }
    let settings = service.get("/docs/swagger-initializer.js").await.expect(200);
    assert!(
        settings.text.contains("/openapi.json") && settings.text.contains("\"validatorUrl\": \"none\""),
        "{}",
        settings.text
    );
}

#[tokio::test]
async fn the_files_of_the_page_are_asked_about_and_not_sent_again() {
    let service = Service::start().await;
    let page = service.get("/").await.expect(200);
    assert!(page.header("content-type").starts_with("text/html"));
    let mut served = 0;
    for name in page
        .text
        .split('"')
        .filter(|part| part.starts_with("/assets/"))
        .chain(["/assets/ask.mjs", "/assets/heronsgate.csv"])
    {
        let file = service.get(name).await.expect(200);
        let kind = if name.ends_with(".mjs") { "text/javascript" } else { "" };
        assert!(
            file.header("content-type").starts_with(kind) && file.header("x-content-type-options") == "nosniff",
            "{name}"
        );
        assert_eq!(file.header("cache-control"), "no-cache", "{name}");
        let again = service.get_with(name, "if-none-match", file.header("etag")).await.expect(304);
        assert!(again.text.is_empty() && again.header("etag") == file.header("etag"), "{name}");
        served += 1;
    }
    assert_eq!(served, 5, "icon, style, start, and two that those name");
    service.get("/assets/nothing.mjs").await.expect_problem(404, "no_such_route");
}

#[tokio::test]
async fn a_request_id_is_kept_when_sane_and_made_when_not() {
    let service = Service::start().await;
    let kept = service.get_with("/livez", "x-request-id", "nightly-17.a").await;
    assert_eq!(kept.header("x-request-id"), "nightly-17.a");
    let problem = service.get_with("/nothing", "x-request-id", "nightly-18").await.expect(404);
    assert_eq!(problem.json()["request_id"], "nightly-18");
    let replaced = service.get_with("/livez", "x-request-id", "a b\"c").await;
    assert_eq!(replaced.header("x-request-id").len(), 36);
    let traced = answered(service.request(Method::GET, "/livez").header("traceparent", "nonsense"));
    traced.await.expect(200);
}

#[tokio::test]
async fn a_stop_finishes_what_was_accepted() {
    let service = Service::start().await;
    let address = service.address();
    let bodies: Vec<_> = (0..8).map(|_| service.request(Method::POST, "/v1/forecasts")).collect();
    let pending: Vec<_> = bodies
        .into_iter()
        .map(|request| {
            let request = request.header("content-type", "application/json").body(forecast_body().to_string());
            tokio::spawn(async move { request.send().await.map(|response| response.status().as_u16()) })
        })
        .collect();
    tokio::time::sleep(Duration::from_millis(30)).await;
    service.stop().await;
    let mut answered = 0;
    for outcome in pending {
        // Either it was accepted and answered in full, or it came after the door was closed; never cut off with a 5xx.
        if let Ok(status) = outcome.await.unwrap() {
            assert_eq!(status, 201);
            answered += 1;
        }
    }
    assert!(answered > 0, "some were accepted before the stop");
    assert!(tokio::net::TcpStream::connect(address).await.is_err(), "nobody listens any more");
}

/// Reads slowly over a connection that holds little, so that most of the answer is still to be sent when the service stops.
#[tokio::test]
async fn a_stop_finishes_an_answer_that_is_being_sent() {
    let service = Service::start().await;
    service.put("/v1/networks/heronsgate", &json!({"degree_kind": "received"})).await.expect(201);
    let path = "/v1/networks/heronsgate/snapshots/2026-06-01";
    let pairs: Vec<[u64; 2]> = (0..800_000).map(|degree| [degree, 1]).collect();
    service.put(path, &json!({"degree_counts": pairs})).await.expect(201);
    let socket = tokio::net::TcpSocket::new_v4().unwrap();
    socket.set_recv_buffer_size(4096).unwrap();
    let mut connection = socket.connect(service.address()).await.unwrap();
    connection.write_all(format!("GET {path} HTTP/1.1\r\nhost: localhost\r\n\r\n").as_bytes()).await.unwrap();
    let mut answer = vec![0; 1024];
    connection.read_exact(&mut answer).await.unwrap();
    let stop = tokio::spawn(service.stop());
    tokio::time::sleep(Duration::from_secs(2)).await;
    connection.read_to_end(&mut answer).await.unwrap();
    stop.await.unwrap();
    let text = String::from_utf8(answer).unwrap();
    let (head, body) = text.split_once("\r\n\r\n").unwrap();
    assert!(head.to_ascii_lowercase().contains(&format!("content-length: {}", body.len())), "{head} {}", body.len());
    assert!(body.len() > 8_000_000 && body.contains("[799999,1]"), "{}", body.len());
}

#[tokio::test]
async fn a_writer_elsewhere_is_waited_for_and_then_reported() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("shared.db").display());
    let service = Service::start_with(|config| {
        config.database.url = url.clone();
        config.database.busy_timeout_ms = 200;
    })
    .await;
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    other.execute("BEGIN IMMEDIATE").await.unwrap();
    let answer = service.post("/v1/fits", &fit_body()).await.expect_problem(503, "store_busy");
    assert!(!answer.header("retry-after").is_empty());
    service.get("/v1/fits").await.expect(200);
    other.execute("ROLLBACK").await.unwrap();
    service.post("/v1/fits", &fit_body()).await.expect(201);
}

#[cfg(unix)]
#[tokio::test]
async fn a_database_that_was_removed_or_replaced_takes_no_run() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("moved.db");
    let service = Service::start_with(|config| config.database.url = format!("sqlite://{}", path.display())).await;
    let kept = service.post("/v1/fits", &fit_body()).await.expect(201);
    let refused = async || {
        service.get("/readyz").await.expect_problem(503, "store_missing");
        service.post("/v1/fits", &fit_body()).await.expect_problem(503, "store_missing");
        service.send(Method::DELETE, kept.header("location")).await.expect_problem(503, "store_missing");
        service.get("/livez").await.expect(200);
    };
    let aside = folder.path().join("aside.db");
    std::fs::rename(&path, &aside).unwrap();
    refused().await;
    std::fs::write(&path, "").unwrap();
    refused().await;
    std::fs::rename(&aside, &path).unwrap();
    service.get("/readyz").await.expect(200);
    service.post("/v1/fits", &fit_body()).await.expect(201);
}

#[tokio::test]
async fn a_missing_table_is_told_before_anything_is_computed() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("tables.db").display());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    other.execute("DROP TABLE idempotency_keys").await.unwrap();
    service.get("/readyz").await.expect_problem(503, "not_ready");
    service.post("/v1/fits", &fit_body()).await.expect_problem(503, "not_ready");
}

#[tokio::test]
async fn a_lock_held_elsewhere_makes_it_not_ready() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("locked.db").display());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    other.execute("BEGIN IMMEDIATE").await.unwrap();
    service.get("/readyz").await.expect_problem(503, "store_busy");
    other.execute("ROLLBACK").await.unwrap();
    // The trial that was given up ends with the lock it waited for.
    tokio::time::sleep(Duration::from_millis(500)).await;
    service.get("/readyz").await.expect(200);
}

//! Too large, too slow, too many.

use std::io::{Read, Write};
use std::net::TcpStream;
use std::time::Duration;

use serde_json::json;

use crate::harness::{Service, changed, fit_body, forecast_body};

#[tokio::test]
async fn a_body_beyond_the_limit_is_refused_with_advice() {
    let service = Service::start_with(|config| config.http.body_limit_bytes = 1000).await;
    let answer = service.post_text("/v1/fits", " ".repeat(2000)).await.expect_problem(413, "body_too_large");
    assert!(answer.text.contains("counts per degree"), "{}", answer.text);
}

#[tokio::test]
async fn more_pairs_than_configured_are_refused() {
    let service = Service::start_with(|config| config.limits.degree_counts = 3).await;
    let body = changed(fit_body(), "/snapshots/0/degree_counts", json!([[0, 9], [1, 9], [2, 9], [3, 9]]));
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/snapshots/0/degree_counts"]);
    assert!(answer.text.contains("4 pairs are more than the 3"), "{}", answer.text);
}

#[tokio::test]
async fn more_rows_of_evidence_than_configured_are_refused() {
    let service = Service::start_with(|config| {
        config.limits.transitions = 1;
        config.limits.link_events = 1;
    })
    .await;
    let rows = json!([[0, 0, 5], [0, 1, 5]]);
    let body = changed(fit_body(), "/transitions", json!([{"from": "2026-05-01", "to": "2026-06-01", "counts": rows}]));
    let cells = json!([[0, 0, 1, 1, 0], [1, 1, 1, 1, 1]]);
    let events = json!({"ratios": [[1, 0, 1], [2, 0, 1]], "windows": [{"cells": cells}]});
    let body = changed(body, "/link_events", events);
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    assert_eq!(
        answer.places(),
        ["/transitions/0/counts", "/link_events/ratios", "/link_events/windows/0/cells"],
        "{}",
        answer.text
    );
}

#[tokio::test]
async fn more_answers_than_configured_are_refused() {
    let service = Service::start_with(|config| config.limits.cells = 3).await;
    let answer = service.post("/v1/forecasts", &forecast_body()).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/dates"]);
}

#[tokio::test]
async fn an_answer_that_takes_too_long_is_given_up() {
    let service = Service::start_with(|config| config.compute.budget_seconds = 0).await;
    let answer = service.post("/v1/forecasts", &forecast_body()).await.expect_problem(503, "too_slow");
    assert!(!answer.header("retry-after").is_empty());
    service.get("/livez").await.expect(200);
}

/// The head of a request whose body never comes to an end.
fn hanging_post(service: &Service) -> TcpStream {
    let mut stream = TcpStream::connect(service.address()).unwrap();
    let head =
        "POST /v1/fits HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 100\r\n\r\n{";
    stream.write_all(head.as_bytes()).unwrap();
    stream
}

#[tokio::test(flavor = "multi_thread")]
async fn a_body_that_does_not_come_is_not_waited_for() {
    let service = Service::start_with(|config| config.http.body_timeout_seconds = 1).await;
    let mut stream = hanging_post(&service);
    stream.set_read_timeout(Some(Duration::from_secs(10))).unwrap();
    let mut response = [0; 4096];
    let length = stream.read(&mut response).unwrap();
    let response = String::from_utf8_lossy(&response[..length]).into_owned();
    assert!(response.starts_with("HTTP/1.1 408") && response.contains("application/problem+json"), "{response}");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_head_that_does_not_come_is_not_waited_for() {
    let service = Service::start_with(|config| config.http.head_timeout_seconds = 1).await;
    let mut stream = TcpStream::connect(service.address()).unwrap();
    stream.write_all(b"GET /livez HTTP/1.1\r\nHost: ").unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(10))).unwrap();
    let mut rest = Vec::new();
    stream.read_to_end(&mut rest).unwrap();
    assert!(!String::from_utf8_lossy(&rest).contains("200 OK"));
}

#[tokio::test(flavor = "multi_thread")]
async fn a_stop_does_not_wait_for_connections_that_ask_for_nothing() {
    let service = Service::start().await;
    let silent = TcpStream::connect(service.address()).unwrap();
    let mut half = TcpStream::connect(service.address()).unwrap();
    half.write_all(b"GET /livez HTTP/1.1\r\nHost: ").unwrap();
    service.get("/livez").await.expect(200);
    let begun = std::time::Instant::now();
    service.stop().await;
    assert!(begun.elapsed() < Duration::from_secs(5), "{:?}", begun.elapsed());
    drop((silent, half));
}

#[tokio::test(flavor = "multi_thread")]
async fn a_full_house_turns_requests_away_but_stays_alive() {
    let service = Service::start_with(|config| config.http.max_in_flight = 1).await;
    let held = hanging_post(&service);
    tokio::time::sleep(Duration::from_millis(200)).await;
    let answer = service.post("/v1/fits", &fit_body()).await.expect_problem(503, "overloaded");
    assert_eq!(answer.header("retry-after"), "1");
    for path in ["/livez", "/readyz", "/metrics", "/openapi.json"] {
        service.get(path).await.expect(200);
    }
    drop(held);
    tokio::time::sleep(Duration::from_millis(200)).await;
    service.post("/v1/fits", &fit_body()).await.expect(201);
}

#[tokio::test]
async fn a_large_body_within_the_limit_is_read() {
    let service = Service::start().await;
    let pairs: Vec<(u64, u64)> = (0..50_000u64).map(|degree| (degree, 1 + 1_000_000 / (degree + 1).pow(2))).collect();
    let body = changed(fit_body(), "/snapshots/0/degree_counts", json!(pairs));
    let body = changed(body, "/fixed", json!({"preferential_share": 0.7}));
    let answer = service.post("/v1/fits", &body).await;
    assert!([201, 422].contains(&answer.status), "{}", answer.text);
    let body = changed(body, "/snapshots/0/degree_counts/49999/1", json!(-1));
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/snapshots/0/degree_counts/49999/1"]);
}

/// So that `limits.cells` bounds the memory of an answer, whatever the network.
#[tokio::test]
async fn an_answer_takes_a_bounded_number_of_bytes_for_each_threshold_and_date() {
    let service = Service::start().await;
    let thresholds: Vec<u64> = (1..=20).collect();
    for (levels, most) in [(2, 300), (20, 1_600)] {
        let levels: Vec<f64> = (1..=levels).map(|i| f64::from(i) / f64::from(levels + 1)).collect();
        let mut lengths = Vec::new();
        for dates in [5, 15] {
            let dates: Vec<String> = (1..=dates).map(|day| format!("2026-07-{day:02}T12:34:56.789Z")).collect();
            let body = changed(forecast_body(), "/thresholds", json!(thresholds));
            let body = changed(changed(body, "/dates", json!(dates)), "/levels", json!(levels));
            lengths.push(service.post("/v1/forecasts", &body).await.expect(201).text.len());
        }
        let each = (lengths[1] - lengths[0]) / (10 * thresholds.len());
        assert!(each < most, "{each} bytes with {} levels", levels.len());
    }
}

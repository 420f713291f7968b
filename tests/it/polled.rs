//! The latest forecast as dashboards poll it: from memory, and never older than what was acknowledged.

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::time::{Duration, Instant};

use reqwest::Method;
use serde_json::json;
use sqlx::{Connection, SqliteConnection};

use crate::harness::{COUNTS, Service, answered};
use crate::tracking::{grown, put_counts, settings, settled};

const NETWORK: &str = "/v1/networks/heronsgate";
const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";

#[tokio::test(flavor = "multi_thread", worker_threads = 3)]
async fn whoever_was_acknowledged_a_change_reads_it() {
    let service = Arc::new(Service::start().await);
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    settled(&service).await;
    let (stop, polls) = (Arc::new(AtomicBool::new(false)), Arc::new(AtomicU64::new(0)));
    // Others poll all the time, so that there is always a copy at hand that could be too old.
    let pollers: Vec<_> = (0..2)
        .map(|_| {
            let (service, stop, polls) = (service.clone(), stop.clone(), polls.clone());
            tokio::spawn(async move {
                while !stop.load(Ordering::Relaxed) {
                    service.get(LATEST).await.expect(200);
                    polls.fetch_add(1, Ordering::Relaxed);
                }
            })
        })
        .collect();
    let mut last = service.get(LATEST).await.expect(200);
    for (round, counts) in grown(&[30.0, 33.0, 36.0, 39.0], |_| (50.0, 3.0)).iter().enumerate() {
        put_counts(&service, "2026-06-01", counts).await;
        let next = service.get(LATEST).await.expect(200);
        match next.header("forecast-state") {
            "refreshing" => assert_eq!(next.header("cache-control"), "private, no-cache"),
            // The refresh was faster than the request.
            "current" => assert_ne!(next.text, last.text, "round {round}"),
            other => panic!("{other}"),
        }
        settled(&service).await;
        let made = service.get(LATEST).await.expect(200);
        assert_eq!(made.header("forecast-state"), "current");
        assert!(made.text != last.text && made.header("etag") != last.header("etag"), "round {round}");
        let unchanged = service.get_with(LATEST, "if-none-match", made.header("etag")).await.expect(304);
        assert!(unchanged.text.is_empty() && unchanged.header("etag") == made.header("etag"));
        service.get_with(LATEST, "if-none-match", last.header("etag")).await.expect(200);
        last = made;
    }
    stop.store(true, Ordering::Relaxed);
    for poller in pollers {
        poller.await.unwrap();
    }
    assert!(polls.load(Ordering::Relaxed) > 20, "others polled");
    service.send(Method::DELETE, last.header("content-location")).await.expect(204);
    service.get(LATEST).await.expect_problem(404, "no_forecast");
    // Stored again, it has a forecast again.
    service.put(NETWORK, &settings()).await.expect(200);
    settled(&service).await;
    service.get(LATEST).await.expect(200);
    service.send(Method::DELETE, NETWORK).await.expect(204);
    service.get(LATEST).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn what_another_process_writes_is_seen_within_moments() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("shared.db").display());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    settled(&service).await;
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    // The copy is looked up now, and then used for a second.
    tokio::time::sleep(Duration::from_millis(1100)).await;
    let looked_up = Instant::now();
    assert_eq!(service.get(LATEST).await.expect(200).header("forecast-state"), "current");
    sqlx::query("UPDATE latest_forecasts SET state = 'outdated'").execute(&mut other).await.unwrap();
    let at_once = service.get(LATEST).await.expect(200);
    if looked_up.elapsed() < Duration::from_millis(900) {
        assert_eq!(at_once.header("forecast-state"), "current", "it comes from memory");
    }
    tokio::time::sleep(Duration::from_millis(1100)).await;
    assert_eq!(service.get(LATEST).await.expect(200).header("forecast-state"), "outdated");
    sqlx::query("DELETE FROM latest_forecasts").execute(&mut other).await.unwrap();
    tokio::time::sleep(Duration::from_millis(1100)).await;
    service.get(LATEST).await.expect_problem(404, "no_forecast");
}

#[tokio::test]
async fn every_form_says_for_how_long_it_may_be_used() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[0]).await;
    put_counts(&service, "2026-06-02", &COUNTS[1]).await;
    settled(&service).await;
    let first = service.get(LATEST).await.expect(200);
    let again = answered(service.request(Method::GET, LATEST).header("x-request-id", "poll-7")).await.expect(200);
    let asked = service.get(&format!("{LATEST}?format=json")).await.expect(200);
    let liked = service.get_with(LATEST, "accept", "audio/ogg, application/json;q=0.9").await.expect(200);
    for answer in [&first, &again, &asked, &liked] {
        assert_eq!(answer.text, first.text);
        for (name, value) in &first.headers {
            if !["x-request-id", "date", "transfer-encoding"].contains(&name.as_str()) {
                assert_eq!(answer.header(name.as_str()), value.to_str().unwrap(), "{name}");
            }
        }
    }
    assert_eq!(again.header("x-request-id"), "poll-7");
    assert_eq!(first.header("x-request-id").len(), 36);
    assert_eq!(first.header("cache-control"), "private, max-age=864, must-revalidate", "a hundredth of a day");
    assert_eq!((first.header("vary"), first.header("x-content-type-options")), ("accept", "nosniff"));
    let table = service.get_with(LATEST, "accept", "text/csv").await.expect(200);
    assert_eq!(table.header("cache-control"), first.header("cache-control"));
    assert!(table.text.starts_with("date,threshold") && table.header("etag") != first.header("etag"));
    let unchanged = service.get_with(&format!("{LATEST}?format=csv"), "if-none-match", table.header("etag")).await;
    assert_eq!(unchanged.expect(304).header("forecast-state"), "current");
    let since = service.get_with(LATEST, "if-modified-since", first.header("last-modified")).await;
    since.expect(304);
    let head = service.send(Method::HEAD, LATEST).await.expect(200);
    assert!(head.text.is_empty() && head.header("etag") == first.header("etag"));
    service.get(&format!("{LATEST}?formt=csv")).await.expect_problem(400, "invalid_request");
    let metrics = service.get("/metrics").await.expect(200).text;
    for status in ["200", "304"] {
        let line = format!(
            "tailcast_http_requests_total{{method=\"GET\",route=\"/v1/networks/{{name}}/forecasts/latest\",status=\"{status}\"}}"
        );
        assert!(metrics.contains(&line), "{line}");
    }
}

#[tokio::test]
async fn without_room_for_copies_it_is_read_each_time() {
    for bytes in [0, 6_000] {
        let service = Service::start_with(|config| config.http.polled_bytes = bytes).await;
        service.put(NETWORK, &settings()).await.expect(201);
        put_counts(&service, "2026-06-01", &COUNTS[1]).await;
        settled(&service).await;
        service.put("/v1/networks/ashford", &settings()).await.expect(201);
        let counts = json!({"degree_counts": [[0, 48], [1, 30], [2, 17], [5, 5], [30, 1]]});
        service.put("/v1/networks/ashford/snapshots/2026-06-01", &counts).await.expect(201);
        while service.get("/v1/networks/ashford/forecasts/latest").await.header("forecast-state") != "current" {
            tokio::time::sleep(Duration::from_millis(30)).await;
        }
        for _ in 0..3 {
            assert_eq!(service.get(LATEST).await.expect(200).json()["network"], "heronsgate");
            let other = service.get("/v1/networks/ashford/forecasts/latest").await.expect(200);
            assert_eq!(other.json()["network"], "ashford");
        }
    }
}

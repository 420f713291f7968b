//! The stream of a network's refreshes.

use std::time::{Duration, Instant};

use reqwest::{Method, Response};
use serde_json::{Value, json};
use tokio::time::timeout;

use crate::harness::{COUNTS, Service, answered};
use crate::tracking::{grown, put_counts, settings, settled};

const NETWORK: &str = "/v1/networks/heronsgate";
const EVENTS: &str = "/v1/networks/heronsgate/events";
const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";
const PATIENCE: Duration = Duration::from_secs(60);

/// An open stream, read event by event.
struct Stream {
    response: Response,
    text: String,
}

/// An event as it was read.
#[derive(Debug)]
struct Told {
    kind: String,
    id: String,
    data: Value,
}

impl Stream {
    async fn open(service: &Service, last_id: Option<&str>) -> Self {
        let request = service.request(Method::GET, EVENTS).header("accept", "text/event-stream");
        let request = last_id.into_iter().fold(request, |request, id| request.header("last-event-id", id));
        let response = request.send().await.unwrap();
        assert_eq!(response.status().as_u16(), 200);
        assert_eq!(response.headers()["content-type"], "text/event-stream");
        assert!(response.headers().contains_key("x-request-id"));
        Self { response, text: String::new() }
    }

    /// The next block of lines; none when the stream has ended.
    async fn block(&mut self) -> Option<String> {
        loop {
            if let Some((block, rest)) = self.text.split_once("\n\n") {
                let (block, rest) = (block.to_owned(), rest.to_owned());
                self.text = rest;
                return Some(block);
            }
            let chunk = timeout(PATIENCE, self.response.chunk()).await.expect("something comes in time").unwrap()?;
            self.text.push_str(std::str::from_utf8(&chunk).unwrap());
        }
    }

    /// The next event, comments passed over; none when the stream has ended.
    async fn next(&mut self) -> Option<Told> {
        loop {
            let block = self.block().await?;
            let field = |name: &str| block.lines().find_map(|line| line.strip_prefix(name)).unwrap_or_default().trim();
            if !field("event:").is_empty() {
                let data = serde_json::from_str(field("data:")).unwrap();
                return Some(Told { kind: field("event:").to_owned(), id: field("id:").to_owned(), data });
            }
        }
    }

    /// Events up to and with the first of a kind.
    async fn until(&mut self, kind: &str) -> Vec<Told> {
        let mut all: Vec<Told> = Vec::new();
        while all.last().is_none_or(|told| told.kind != kind) {
            all.push(self.next().await.expect("the stream goes on"));
        }
        all
    }
}

fn kinds(told: &[Told]) -> Vec<&str> {
    told.iter().map(|told| told.kind.as_str()).collect()
}

/// Ids of the forecasts that refreshes issued, oldest first.
async fn issued(service: &Service) -> Vec<Value> {
    let list = service.get("/v1/forecasts?network=heronsgate&limit=200").await.expect(200).json();
    let issued = list["items"].as_array().unwrap().iter().filter(|line| line["issued"] == true);
    issued.rev().map(|line| line["id"].clone()).collect()
}

#[tokio::test]
async fn a_stream_tells_what_becomes_of_refreshes() {
    let service = Service::start().await;
    service.get(EVENTS).await.expect_problem(404, "not_found");
    service.put(NETWORK, &settings()).await.expect(201);
    service.get_with(EVENTS, "accept", "text/csv").await.expect_problem(406, "not_acceptable");
    service.get(&format!("{EVENTS}?since=1")).await.expect_problem(400, "invalid_request");
    let limit = json!({"threshold": 10, "max_nodes": 900, "by": "2026-08-01", "risk": 0.1});
    service.put(&format!("{NETWORK}/limits/fan-out"), &limit).await.expect(201);
    settled(&service).await;
    let mut stream = Stream::open(&service, None).await;
    let first = stream.next().await.unwrap();
    assert_eq!(first.kind, "failed", "there is no snapshot yet: {first:?}");
    assert!(first.data["reason"].as_str().unwrap().contains("no snapshot"), "{first:?}");
    // The stream waits by now, and so sees the refresh before it ends.
    tokio::time::sleep(Duration::from_millis(400)).await;
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    let told = stream.until("forecast").await;
    assert_eq!(kinds(&told), ["refreshing", "forecast"]);
    assert_eq!(told[0].data["network"], "heronsgate");
    service.get(&format!("/v1/jobs/{}", told[0].data["job"].as_str().unwrap())).await.expect(200);
    let latest = service.get(LATEST).await.expect(200).json();
    let (told, answer) = (&told[1].data, &latest["limits"][0]);
    assert_eq!(told["forecast"], latest["id"]);
    let expected = json!({
        "name": "fan-out", "threshold": 10, "max_nodes": 900, "by": "2026-08-01", "risk": 0.1,
        "crossed": answer["at_by"]["crossed"], "headroom": answer["headroom"], "verdict": answer["verdict"],
    });
    assert_eq!(told["limits"], json!([expected]));
    put_counts(&service, "2026-06-01", &COUNTS[0]).await;
    let told = stream.until("forecast").await;
    assert_eq!(told[0].kind, "corrected", "{told:?}");
    assert!(told[0].data["corrected_at"].as_str().unwrap().ends_with('Z'));
    service.send(Method::DELETE, &format!("{NETWORK}/snapshots/2026-06-01")).await.expect(204);
    let told = stream.until("failed").await;
    assert_eq!(told[0].kind, "corrected", "{told:?}");
    service.send(Method::DELETE, NETWORK).await.expect(204);
    let last = stream.until("deleted").await.pop().unwrap();
    assert_eq!(last.data, json!({"network": "heronsgate"}));
    assert!(stream.block().await.is_none(), "the stream ends");
    service.get(EVENTS).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn who_comes_back_misses_no_forecast() {
    let service = Service::start_with(|config| config.http.stream_keep_alive_seconds = 1).await;
    service.put(NETWORK, &settings()).await.expect(201);
    let counts = grown(&[30.0, 60.0, 90.0], |_| (50.0, 3.0));
    put_counts(&service, "2026-05-01", &counts[0]).await;
    settled(&service).await;
    let mut stream = Stream::open(&service, None).await;
    let first = stream.next().await.unwrap();
    assert_eq!((first.kind.as_str(), &first.data["forecast"]), ("forecast", &issued(&service).await[0]));
    drop(stream);
    for (date, counts) in [("2026-06-01", &counts[1]), ("2026-07-01", &counts[2])] {
        put_counts(&service, date, counts).await;
        settled(&service).await;
    }
    let mut stream = Stream::open(&service, Some(&first.id)).await;
    let missed = [stream.next().await.unwrap(), stream.next().await.unwrap()];
    let all = issued(&service).await;
    assert_eq!(missed.iter().map(|told| told.data["forecast"].clone()).collect::<Vec<_>>(), all[1..]);
    assert!(missed[0].data["revision"].as_u64() < missed[1].data["revision"].as_u64());
    // Whoever comes back between the two is told the second.
    let mut between = Stream::open(&service, Some(&missed[0].id)).await;
    assert_eq!(between.next().await.unwrap().data, missed[1].data);
    // Whoever has read all of it is told nothing, but that there is somebody.
    let mut current = Stream::open(&service, Some(&missed[1].id)).await;
    let block = current.block().await.unwrap();
    assert!(block.starts_with(':'), "{block}");
    // What is no id of ours counts as none.
    let mut anew = Stream::open(&service, Some("yesterday")).await;
    assert_eq!(anew.next().await.unwrap().data, missed[1].data);
}

#[tokio::test]
async fn streams_are_counted_and_hinder_nobody() {
    let service = Service::start_with(|config| {
        config.http.max_streams = 1;
        config.http.max_in_flight = 1;
        config.http.stream_keep_alive_seconds = 1;
    })
    .await;
    service.put(NETWORK, &settings()).await.expect(201);
    settled(&service).await;
    let job = service.get("/v1/jobs").await.expect(200).json()["items"][0]["id"].as_str().unwrap().to_owned();
    let stream = Stream::open(&service, None).await;
    // The only place of max_in_flight is free.
    service.get(NETWORK).await.expect(200);
    let refused = service.get_with(EVENTS, "accept", "text/event-stream").await;
    let refused = refused.expect_problem(503, "too_many_streams");
    assert!(refused.header("retry-after").parse::<u64>().unwrap() > 0);
    let of_job = service.get_with(&format!("/v1/jobs/{job}"), "accept", "text/event-stream").await;
    of_job.expect_problem(503, "too_many_streams");
    drop(stream);
    let begun = Instant::now();
    loop {
        let request = service.request(Method::GET, EVENTS).header("accept", "text/event-stream");
        let response = request.send().await.unwrap();
        if response.status().as_u16() == 200 {
            break;
        }
        assert!(begun.elapsed() < PATIENCE, "the place of a client that went is free again");
        tokio::time::sleep(Duration::from_millis(100)).await;
    }
}

#[tokio::test]
async fn open_streams_do_not_hold_up_a_stop() {
    let service = Service::start_with(|config| config.http.shutdown_grace_seconds = 30).await;
    service.put(NETWORK, &settings()).await.expect(201);
    let mut stream = Stream::open(&service, None).await;
    stream.next().await.unwrap();
    let begun = Instant::now();
    service.stop().await;
    assert!(begun.elapsed() < Duration::from_secs(10), "{:?}", begun.elapsed());
}

#[tokio::test]
async fn a_stream_is_asked_for_without_saying_so() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    settled(&service).await;
    let response = service.request(Method::GET, EVENTS).send().await.unwrap();
    assert_eq!(response.headers()["content-type"], "text/event-stream");
    assert_eq!(response.headers()["cache-control"], "no-cache");
    drop(response);
    let refused = answered(service.request(Method::GET, EVENTS).header("accept", "application/json"));
    refused.await.expect_problem(406, "not_acceptable");
}

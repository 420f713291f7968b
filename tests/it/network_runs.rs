//! Runs from all that is stored of a tracked network.

use reqwest::Method;
use serde_json::{Value, json};

use crate::harness::{COUNTS, Service, answered, changed, forecast_body, pairs};

const NETWORK: &str = "/v1/networks/heronsgate";

async fn tracking() -> Service {
    let service = Service::start().await;
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    service
}

async fn put_counts(service: &Service, as_of: &str, counts: Value) {
    let put = service.put(&format!("{NETWORK}/snapshots/{as_of}"), &json!({"degree_counts": counts})).await;
    assert!([200, 201].contains(&put.status), "{}", put.text);
}

/// What a run of a network is asked: an inline body without its evidence.
fn asked() -> Value {
    let body = changed(forecast_body(), "/snapshots", Value::Null);
    changed(body, "/degree_kind", Value::Null)
}

#[tokio::test]
async fn a_run_from_what_is_stored_is_the_run_from_the_same_inline() {
    let service = tracking().await;
    put_counts(&service, "2026-05-02", pairs(&COUNTS[0])).await;
    put_counts(&service, "2026-06-01", pairs(&COUNTS[1])).await;
    let stored = service.post(&format!("{NETWORK}/forecasts"), &asked()).await.expect(201);
    let snapshots = json!([
        {"as_of": "2026-05-02", "degree_counts": pairs(&COUNTS[0])},
        {"as_of": "2026-06-01", "degree_counts": pairs(&COUNTS[1])},
    ]);
    let inline = service.post("/v1/forecasts", &changed(forecast_body(), "/snapshots", snapshots)).await.expect(201);
    for part in ["inputs_digest", "fit", "forecast", "warnings"] {
        assert_eq!(stored.json()[part], inline.json()[part], "{part}");
    }
    assert_eq!((&stored.json()["network"], &inline.json()["network"]), (&json!("heronsgate"), &Value::Null));
    let location = stored.header("location");
    assert!(location.starts_with("/v1/forecasts/"));
    assert_eq!(service.get(location).await.expect(200).text, stored.text);
    let list = service.get("/v1/forecasts?network=heronsgate").await.expect(200).json();
    let ids: Vec<&Value> = list["items"].as_array().unwrap().iter().map(|line| &line["id"]).collect();
    assert_eq!(ids, [&stored.json()["id"]], "only the network's own");
    assert_eq!(list["items"][0]["network"], "heronsgate");
    let csv = service.post(&format!("{NETWORK}/fits?format=csv"), &json!({"links_per_arrival": 3.0})).await.expect(201);
    assert!(csv.text.starts_with("degree,observed,fitted"));
}

#[tokio::test]
async fn everything_that_is_stored_goes_into_a_run() {
    let service = tracking().await;
    let put = async |path: &str, body: &Value| {
        let answer = service.put(&format!("{NETWORK}/{path}"), body).await;
        assert!([200, 201].contains(&answer.status), "{}", answer.text);
    };
    let run = async || {
        let body = json!({"links_per_arrival": 1.5, "fixed": {"preferential_share": 0.5}});
        service.post(&format!("{NETWORK}/fits"), &body).await.expect(201).json()["inputs_digest"].clone()
    };
    let inline = async |more: Value| {
        let mut body =
            json!({"degree_kind": "received", "links_per_arrival": 1.5, "fixed": {"preferential_share": 0.5}});
        body.as_object_mut().unwrap().extend(more.as_object().unwrap().clone());
        service.post("/v1/fits", &body).await.expect(201).json()["inputs_digest"].clone()
    };
    let rows = json!([[null, 0, 30], [0, 0, 18], [0, 1, 20], [1, 1, 10], [1, 2, 15], [4, 5, 5]]);
    put("transitions/2026-05-01/2026-06-01", &json!({"counts": rows})).await;
    // Where no snapshot of a date is stored, the counts that the transitions tell stand for it.
    let snapshots = json!([
        {"as_of": "2026-05-01", "degree_counts": [[0, 38], [1, 25], [4, 5]]},
        {"as_of": "2026-06-01", "degree_counts": [[0, 48], [1, 30], [2, 15], [5, 5]]},
    ]);
    let transitions = json!([{"from": "2026-05-01", "to": "2026-06-01", "counts": rows}]);
    let mut evidence = json!({"snapshots": snapshots, "transitions": transitions});
    assert_eq!(run().await, inline(evidence.clone()).await);
    put("snapshots/2026-06-01", &json!({"degree_counts": [[0, 48], [1, 30], [2, 15], [5, 5]]})).await;
    assert_eq!(run().await, inline(evidence.clone()).await);
    let events = json!({"ratios": [[0.5, 0.01, 30]], "windows": [{"cells": [[0, 0, 22, 900.0, 0]]}]});
    put("link-events", &events).await;
    evidence["link_events"] = events;
    assert_eq!(run().await, inline(evidence.clone()).await);
    let entry = json!([[0, 0.9], [1, 0.1]]);
    service.put(NETWORK, &json!({"degree_kind": "received", "entry_degrees": entry})).await.expect(200);
    evidence["entry_degrees"] = entry;
    assert_eq!(run().await, inline(evidence).await);
}

#[tokio::test]
async fn a_run_needs_something_to_start_from_and_takes_no_evidence() {
    let service = tracking().await;
    let path = format!("{NETWORK}/forecasts");
    let answer = service.post(&path, &asked()).await.expect_problem(422, "no_snapshot");
    assert!(answer.text.contains("PUT one under"), "{}", answer.text);
    service.post("/v1/networks/nowhere/forecasts", &asked()).await.expect_problem(404, "not_found");
    service.post("/v1/networks/a%20b/fits", &json!({})).await.expect_problem(400, "invalid_request");
    put_counts(&service, "2026-06-01", pairs(&COUNTS[1])).await;
    let body = changed(asked(), "/snapshots", json!([]));
    let body = changed(changed(body, "/entry_degrees", json!([[0, 1]])), "/thresholds", json!([0]));
    let answer = service.post(&path, &body).await.expect_problem(400, "invalid_request");
    let mut places = answer.places();
    places.sort();
    assert_eq!(places, ["/entry_degrees", "/snapshots", "/thresholds/0"]);
    assert!(answer.text.contains("stored with the network"), "{}", answer.text);
    let answer = service.post(&path, &changed(asked(), "/dates", json!(["2026-05-01"]))).await.expect(400);
    assert_eq!(answer.places(), ["/dates/0"], "dates are held against the newest stored snapshot");
    service.post(&path, &changed(asked(), "/arrivals", Value::Null)).await.expect_problem(422, "arrivals_required");
}

#[tokio::test]
async fn keys_of_one_network_are_not_those_of_another() {
    let service = tracking().await;
    service.put("/v1/networks/other", &json!({"degree_kind": "received"})).await.expect(201);
    put_counts(&service, "2026-06-01", pairs(&COUNTS[1])).await;
    service
        .put("/v1/networks/other/snapshots/2026-06-01", &json!({"degree_counts": pairs(&COUNTS[1])}))
        .await
        .expect(201);
    let body = json!({"fixed": {"preferential_share": 0.5}, "links_per_arrival": 3.0});
    let post = async |path: &str| {
        let request = service.request(Method::POST, path).header("idempotency-key", "nightly");
        answered(request.json(&body)).await
    };
    let first = post(&format!("{NETWORK}/fits")).await.expect(201);
    // What is stored may change meanwhile: the run was made from what was stored then.
    put_counts(&service, "2026-06-01", pairs(&COUNTS[0])).await;
    assert_eq!(post(&format!("{NETWORK}/fits")).await.expect(201).text, first.text);
    let other = post("/v1/networks/other/fits").await.expect(201);
    assert_ne!(other.json()["id"], first.json()["id"]);
    assert_eq!(post("/v1/networks/other/fits").await.expect(201).text, other.text);
    let request = service.request(Method::POST, &format!("{NETWORK}/fits")).header("idempotency-key", "nightly");
    answered(request.json(&json!({"label": "another"}))).await.expect_problem(409, "idempotency_key_reused");
}

//! `/v1/fits`

use reqwest::Method;
use serde_json::{Value, json};

use tailcast::service::sha256_hex;

use crate::harness::{Service, changed, fit_body};

#[tokio::test]
async fn a_fit_is_answered_with_its_diagnostics_and_kept() {
    let service = Service::start().await;
    let posted = service.post("/v1/fits", &changed(fit_body(), "/label", json!("mix"))).await.expect(201);
    let run = posted.json();
    assert_eq!(run["label"], "mix");
    assert!(run["fit"]["preferential_share"]["estimate"].as_f64().is_some_and(|share| (0.0..=1.0).contains(&share)));
    for member in ["model", "evidence", "links_per_arrival", "entry_degrees", "candidates"] {
        assert!(!run["fit"][member].is_null(), "{member}");
    }
    assert!(run["tail"].as_array().unwrap().iter().all(|point| point["observed"].is_u64() && point["fitted"].is_f64()));
    assert!(!run["cautions"].as_array().unwrap().is_empty());
    assert_eq!(run.get("forecast"), None);
    let location = posted.header("location");
    assert!(location.starts_with("/v1/fits/"));
    assert_eq!(service.get(location).await.expect(200).text, posted.text);
    let csv = service.get(&format!("{location}?format=csv")).await.expect(200);
    assert!(csv.text.starts_with("degree,observed,fitted,warnings,cautions\r\n"));
    let lines = csv.text.trim_end().lines().count();
    assert_eq!(lines, 1 + run["tail"].as_array().unwrap().len());
    service.send(Method::DELETE, location).await.expect(204);
    service.get(location).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn a_fit_takes_no_questions_about_the_future() {
    let service = Service::start().await;
    let body = changed(changed(fit_body(), "/thresholds", json!([10])), "/arrivals", json!({"per_day": 1}));
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    let mut places = answer.places();
    places.sort();
    assert_eq!(places, ["/arrivals", "/thresholds"]);
}

#[tokio::test]
async fn a_given_mix_is_taken_as_given() {
    let service = Service::start().await;
    let body = changed(fit_body(), "/fixed", json!({"preferential_share": 0.25}));
    let run = service.post("/v1/fits", &body).await.expect(201).json();
    assert_eq!(run["fit"]["preferential_share"]["estimate"], 0.25);
    assert_eq!(run["network"], Value::Null);
}

/// What is known of a network of 100 nodes beside its newest snapshot.
fn more_evidence() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [
            {"as_of": "2026-05-01", "degree_counts": [[0, 40], [1, 25], [4, 5]]},
            {"as_of": "2026-06-01", "degree_counts": [[0, 48], [1, 30], [2, 17], [5, 5]]},
        ],
        "transitions": [{"from": "2026-05-01", "to": "2026-06-01", "counts": [
            [null, 0, 30], [0, 0, 18], [0, 1, 20], [1, 1, 10], [1, 2, 15], [4, 5, 5], [0, 2, 2],
        ]}],
        "link_events": {
            "ratios": [[0.5, 0.01, 30], [8.0, 0.2, 5]],
            "windows": [{"cells": [[0, 0, 22, 900.0, 0], [1, 4, 13, 800.0, 1300.5]]}],
        },
        "links_per_arrival": 1.5,
        "fixed": {"preferential_share": 0.5},
    })
}

#[tokio::test]
async fn transitions_and_link_events_are_taken_and_are_part_of_the_digest() {
    let service = Service::start().await;
    let digest = async |body: &Value| {
        let run = service.post("/v1/fits", body).await.expect(201).json();
        run["inputs_digest"].as_str().unwrap().to_owned()
    };
    let all = digest(&more_evidence()).await;
    let mut rows = more_evidence().pointer("/transitions/0/counts").unwrap().as_array().unwrap().clone();
    rows.reverse();
    rows.push(json!([7, 9, 0]));
    let rewritten = changed(more_evidence(), "/transitions/0/counts", json!(rows));
    let rewritten = changed(rewritten, "/transitions/0/from", json!("2026-05-01T01:00:00+01:00"));
    assert_eq!(digest(&rewritten).await, all, "the order of rows and rows without nodes tell nothing");
    let without_events = digest(&changed(more_evidence(), "/link_events", Value::Null)).await;
    let bare = changed(changed(more_evidence(), "/link_events", Value::Null), "/transitions", Value::Null);
    let bare_digest = digest(&bare).await;
    assert!(all != without_events && without_events != bare_digest && all != bare_digest);
    assert_eq!(digest(&changed(bare, "/transitions", json!([]))).await, bare_digest);
}

/// The canonical form is a promise: the digest of inputs that could be given before must not change.
#[tokio::test]
async fn the_digest_is_that_of_the_canonical_form() {
    let service = Service::start().await;
    let canonical = r#"{"asked":"fit","degree_kind":"received","snapshots":[{"as_of":"2026-06-01","degree_counts":[[0,40],[1,25],[4,5]]}],"entry_degrees":null,"model":"auto","preferential_share":0.5,"links_per_arrival":1.5,"links_per_node_day":0.0,"departures_per_node_day":0.0,"link_losses_per_link_day":0.0}"#;
    let body = json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[4, 5], [0, 40], [1, 25]]}],
        "links_per_arrival": 1.5,
        "fixed": {"preferential_share": 0.5},
    });
    let run = service.post("/v1/fits", &body).await.expect(201).json();
    assert_eq!(run["inputs_digest"], format!("sha-256:{}", sha256_hex(canonical.as_bytes())));
}

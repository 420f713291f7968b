//! `/v1/fits`

use reqwest::Method;
use serde_json::{Value, json};

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

//! Lists of runs and their pages.

use serde_json::{Value, json};

use crate::harness::{Service, changed, fit_body, forecast_body};

/// Ids of a page, and the address of the next.
async fn page(service: &Service, address: &str) -> (Vec<String>, Option<String>) {
    let answer = service.get(address).await.expect(200);
    let items = answer.json()["items"].as_array().unwrap().clone();
    let next = answer.header("link").strip_prefix('<').and_then(|link| link.strip_suffix(">; rel=\"next\""));
    (items.iter().map(|item| item["id"].as_str().unwrap().to_owned()).collect(), next.map(str::to_owned))
}

#[tokio::test]
async fn pages_run_newest_first_and_lead_on() {
    let service = Service::start().await;
    let mut made = Vec::new();
    for i in 0..5 {
        let label = if i % 2 == 0 { "even & odd" } else { "odd" };
        let body = changed(fit_body(), "/label", json!(label));
        made.insert(0, service.post("/v1/fits", &body).await.expect(201).json()["id"].as_str().unwrap().to_owned());
    }
    let (first, next) = page(&service, "/v1/fits?limit=2").await;
    let (second, next) = page(&service, &next.unwrap()).await;
    let (third, end) = page(&service, &next.unwrap()).await;
    assert_eq!([first, second, third].concat(), made);
    assert_eq!(end, None);
    let (even, next) = page(&service, "/v1/fits?label=even%20%26%20odd&limit=2").await;
    let (last, end) = page(&service, &next.unwrap()).await;
    assert_eq!([even, last].concat(), [made[0].clone(), made[2].clone(), made[4].clone()]);
    assert_eq!(end, None, "a label with special characters survives the way to the next page");
    assert_eq!(page(&service, "/v1/fits?label=none").await, (vec![], None));
    assert_eq!(page(&service, "/v1/fits?network=none").await, (vec![], None));
    assert_eq!(page(&service, "/v1/forecasts").await, (vec![], None), "each kind has its own list");
}

#[tokio::test]
async fn a_line_tells_what_a_run_is() {
    let service = Service::start().await;
    let run = service.post("/v1/forecasts", &changed(forecast_body(), "/seed", json!(7))).await.expect(201).json();
    let list = service.get("/v1/forecasts").await.expect(200);
    let line = &list.json()["items"][0];
    for member in ["id", "created_at", "label", "network", "engine", "seed", "inputs_digest"] {
        assert_eq!(line[member], run[member], "{member}");
    }
    assert_eq!(line["label"], Value::Null);
}

#[tokio::test]
async fn wrong_parameters_are_named() {
    let service = Service::start().await;
    for (query, parameter) in [
        ("limit=0", "limit"),
        ("limit=201", "limit"),
        ("limit=ten", "limit"),
        ("cursor=xyz", "cursor"),
        ("labl=a", "labl"),
        ("label=a&label=b", "label"),
        ("label=a%00b", "label"),
    ] {
        let answer = service.get(&format!("/v1/forecasts?{query}")).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [parameter], "{query}");
    }
    let answer = service.get("/v1/forecasts?limit=0&cursor=x&labl=a").await.expect(400);
    assert_eq!(answer.places().len(), 3, "all at once");
    assert!(answer.text.contains("did you mean \\\"label\\\""), "{}", answer.text);
}

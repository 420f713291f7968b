//! Every operation of the OpenAPI document is exercised: a new one without a call here fails.

use std::collections::BTreeSet;

use serde_json::json;

use crate::harness::{DOCUMENT, Service, answered, csv, fit_body, forecast_body, json_text};
use crate::notices::sends;
use crate::sources::{NOBODY, counts_in};

/// Every operation with the status its plain use is answered with, in an order in which all of them work.
pub const CALLS: [(&str, &str, u16); 58] = [
    ("get", "/livez", 200),
    ("get", "/readyz", 200),
    ("get", "/metrics", 200),
    ("get", "/openapi.json", 200),
    ("get", "/v1/audit", 200),
    ("post", "/v1/forecasts", 201),
    ("get", "/v1/forecasts", 200),
    ("get", "/v1/forecasts/{id}", 200),
    ("delete", "/v1/forecasts/{id}", 204),
    ("post", "/v1/fits", 201),
    ("get", "/v1/fits", 200),
    ("get", "/v1/fits/{id}", 200),
    ("delete", "/v1/fits/{id}", 204),
    ("put", "/v1/networks/{name}", 201),
    ("get", "/v1/networks/{name}", 200),
    ("get", "/v1/networks", 200),
    ("put", "/v1/networks/{name}/links", 200),
    ("get", "/v1/jobs", 200),
    ("get", "/v1/jobs/{id}", 200),
    ("delete", "/v1/jobs/{id}", 204),
    ("put", "/v1/networks/{name}/snapshots/{as_of}", 201),
    ("get", "/v1/networks/{name}/snapshots/{as_of}", 200),
    ("get", "/v1/networks/{name}/snapshots", 200),
    ("put", "/v1/networks/{name}/transitions/{from}/{to}", 201),
    ("get", "/v1/networks/{name}/transitions/{from}/{to}", 200),
    ("get", "/v1/networks/{name}/transitions", 200),
    ("put", "/v1/networks/{name}/link-events", 201),
    ("get", "/v1/networks/{name}/link-events", 200),
    ("post", "/v1/networks/{name}/forecasts", 201),
    ("post", "/v1/networks/{name}/fits", 201),
    ("put", "/v1/networks/{name}/limits/{limit}", 201),
    ("get", "/v1/networks/{name}/limits/{limit}", 200),
    ("get", "/v1/networks/{name}/limits", 200),
    ("put", "/v1/networks/{name}/scenarios/{scenario}", 201),
    ("get", "/v1/networks/{name}/scenarios/{scenario}", 200),
    ("get", "/v1/networks/{name}/scenarios", 200),
    ("put", "/v1/networks/{name}/notices/{notice}", 201),
    ("get", "/v1/networks/{name}/notices/{notice}", 200),
    ("get", "/v1/networks/{name}/notices", 200),
    ("delete", "/v1/networks/{name}/notices/{notice}", 204),
    ("put", "/v1/networks/{name}/source", 201),
    ("get", "/v1/networks/{name}/source", 200),
    // Nobody listens at its database's address.
    ("post", "/v1/networks/{name}/source/runs", 422),
    ("delete", "/v1/networks/{name}/source", 204),
    // The network has no plan.
    ("get", "/v1/networks/{name}/comparison", 422),
    ("delete", "/v1/networks/{name}/limits/{limit}", 204),
    ("delete", "/v1/networks/{name}/scenarios/{scenario}", 204),
    ("get", "/v1/networks/{name}/accuracy", 200),
    ("post", "/v1/networks/{name}/backtests", 201),
    ("get", "/v1/networks/{name}/backtests", 200),
    ("get", "/v1/backtests/{id}", 200),
    ("delete", "/v1/backtests/{id}", 204),
    // The network has no plan.
    ("get", "/v1/networks/{name}/forecasts/latest", 404),
    // Asked for a form that it does not have: a stream has no end to wait for, and tests/it/network_events.rs reads some.
    ("get", "/v1/networks/{name}/events", 406),
    ("delete", "/v1/networks/{name}/link-events", 204),
    ("delete", "/v1/networks/{name}/transitions/{from}/{to}", 204),
    ("delete", "/v1/networks/{name}/snapshots/{as_of}", 204),
    ("delete", "/v1/networks/{name}", 204),
];

/// Where a call leads, `made` being the run or job that was made last.
pub fn address(path: &str, made: &str) -> String {
    let address = path.replace("{id}", made).replace("{name}", "heronsgate").replace("{as_of}", "2026-06-01");
    let address = address.replace("{from}", "2026-05-01").replace("{to}", "2026-06-01");
    let address = address.replace("{limit}", "fan-out").replace("{scenario}", "campaign");
    address.replace("{notice}", "on-call")
}

/// The body that a call is made with.
pub fn body(method: &str, path: &str) -> Option<(&'static str, String)> {
    if !["post", "put"].contains(&method) {
        return None;
    }
    let resource = path.split('/').rfind(|part| !part.starts_with('{')).unwrap();
    if resource == "runs" {
        return None;
    }
    if resource == "links" {
        return Some(csv("time,source,target\n2020-01-01,ana,ben\n"));
    }
    Some(json_text(&match (resource, path.contains("{name}")) {
        ("forecasts", false) => forecast_body(),
        ("fits", false) => fit_body(),
        ("forecasts", true) => json!({"arrivals": {"per_day": 1}, "thresholds": [3], "dates": ["2027-01-01"]}),
        ("fits", true) => json!({"fixed": {"preferential_share": 0.5}}),
        ("backtests", _) => json!({"thresholds": [1]}),
        ("limits", _) => json!({"threshold": 3, "max_nodes": 20, "by": "2027-01-01"}),
        ("scenarios", _) => json!({"arrivals_factor": 1.2}),
        ("notices", _) => json!({"url": "https://hooks.example.org/tailcast"}),
        ("source", _) => json!({"database": "links", "query": "SELECT 0 AS degree, 1 AS nodes", "every": "P1D"}),
        ("networks", _) => json!({"degree_kind": "received"}),
        ("snapshots", _) => json!({"degree_counts": [[0, 48], [1, 30], [2, 17], [5, 5]]}),
        ("transitions", _) => {
            json!({"counts": [[null, 0, 48], [0, 1, 30], [1, 2, 17], [2, 5, 5]]})
        }
        ("link-events", _) => json!({"ratios": [[1, 0, 5]], "windows": []}),
        (other, _) => panic!("{other}: no body is known"),
    }))
}

#[test]
fn the_calls_are_the_documents_operations() {
    let mut documented = BTreeSet::new();
    for (path, item) in DOCUMENT["paths"].as_object().unwrap() {
        documented.extend(item.as_object().unwrap().keys().map(|method| (method.clone(), path.clone())));
    }
    let called: BTreeSet<_> = CALLS.iter().map(|&(method, path, _)| (method.to_owned(), path.to_owned())).collect();
    assert_eq!(called, documented);
}

#[tokio::test]
async fn every_operation_works() {
    let service = Service::start_with(|config| {
        sends(config, &["https://hooks.example.org"]);
        counts_in(config, NOBODY);
    })
    .await;
    let mut made = String::new();
    for (method, path, status) in CALLS {
        let address = address(path, &made);
        let request = service.request(method.to_uppercase().parse().unwrap(), &address);
        let request = if path.ends_with("/events") { request.header("accept", "text/csv") } else { request };
        let answer = match body(method, path) {
            Some((kind, body)) => answered(request.header("content-type", kind).body(body)).await.expect(status),
            None => answered(request).await.expect(status),
        };
        if status == 201 && method == "post" || path.ends_with("/links") {
            made = answer.json()["id"].as_str().unwrap().to_owned();
        }
    }
}

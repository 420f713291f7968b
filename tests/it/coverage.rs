//! Every operation of the OpenAPI document is exercised: a new one without a call here fails.

use std::collections::BTreeSet;

use reqwest::Method;

use crate::harness::{DOCUMENT, Service, fit_body, forecast_body};

/// Every operation with the status its plain use is answered with.
const CALLS: [(&str, &str, u16); 12] = [
    ("post", "/v1/forecasts", 201),
    ("get", "/v1/forecasts", 200),
    ("get", "/v1/forecasts/{id}", 200),
    ("delete", "/v1/forecasts/{id}", 204),
    ("post", "/v1/fits", 201),
    ("get", "/v1/fits", 200),
    ("get", "/v1/fits/{id}", 200),
    ("delete", "/v1/fits/{id}", 204),
    ("get", "/livez", 200),
    ("get", "/readyz", 200),
    ("get", "/metrics", 200),
    ("get", "/openapi.json", 200),
];

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
    let service = Service::start().await;
    for (resource, body) in [("forecasts", forecast_body()), ("fits", fit_body())] {
        let made = service.post(&format!("/v1/{resource}"), &body).await.expect(201).json();
        let id = made["id"].as_str().unwrap();
        for (method, path, status) in
            CALLS.iter().filter(|(method, path, _)| path.contains(resource) && *method != "post")
        {
            let method: Method = method.to_uppercase().parse().unwrap();
            service.send(method, &path.replace("{id}", id)).await.expect(*status);
        }
    }
    for (method, path, status) in CALLS.iter().filter(|(_, path, _)| !path.starts_with("/v1")) {
        let method: Method = method.to_uppercase().parse().unwrap();
        service.send(method, path).await.expect(*status);
    }
}

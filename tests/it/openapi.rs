//! The OpenAPI document: committed, complete, and in step with the readers.

use std::collections::BTreeSet;

use serde_json::{Value, json};
use tailcast::api::{
    CHANGE_FIELDS, EVIDENCE_FIELDS, FIT_FIELDS, FORECAST_FIELDS, LIMIT_FIELDS, NETWORK_FIELDS, NOTICE_FIELDS,
    example_request, openapi_text,
};

use crate::harness::{DOCUMENT, Service};

const COMMITTED: &str = include_str!("../../openapi/openapi.json");

#[test]
fn the_committed_document_is_current() {
    assert!(COMMITTED == openapi_text(), "write it anew: cargo run -- openapi > openapi/openapi.json");
    assert_eq!(DOCUMENT["openapi"], "3.1.0");
}

#[tokio::test]
async fn the_served_document_is_the_committed_one() {
    let service = Service::start().await;
    assert_eq!(service.get("/openapi.json").await.expect(200).text, COMMITTED);
}

#[test]
fn documented_fields_are_the_fields_that_are_read() {
    let documented = |schema: &str| -> BTreeSet<String> {
        let schema = &DOCUMENT["components"]["schemas"][schema];
        assert_eq!(schema["additionalProperties"], false, "unknown fields are refused");
        schema["properties"].as_object().unwrap().keys().cloned().collect()
    };
    let read = |fields: &[&str]| fields.iter().map(|&field| field.to_owned()).collect::<BTreeSet<_>>();
    assert_eq!(documented("ForecastRequestBody"), read(&FORECAST_FIELDS));
    assert_eq!(documented("FitRequestBody"), read(&FIT_FIELDS));
    assert_eq!(documented("NetworkBody"), read(&NETWORK_FIELDS));
    assert_eq!(documented("KeptLimitBody"), read(&LIMIT_FIELDS));
    assert_eq!(documented("ChangeBody"), read(&CHANGE_FIELDS));
    assert_eq!(documented("NoticeBody"), read(&NOTICE_FIELDS));
    for (inline, kept) in [("LimitBody", "KeptLimitBody"), ("ScenarioBody", "ChangeBody")] {
        assert_eq!(&documented(inline) - &documented(kept), read(&["name"]));
    }
    let evidence = read(&EVIDENCE_FIELDS);
    assert_eq!(documented("NetworkForecastBody"), &read(&FORECAST_FIELDS) - &evidence);
    assert_eq!(documented("NetworkFitBody"), &read(&FIT_FIELDS) - &evidence);
}

#[tokio::test]
async fn the_examples_are_answered_as_they_stand() {
    let service = Service::start().await;
    let run = service.post("/v1/forecasts", &example_request()).await.expect(201).json();
    let warnings: Vec<&str> = run["warnings"].as_array().unwrap().iter().filter_map(|w| w["code"].as_str()).collect();
    // What every forecast from inline counts is told; nothing about a fit that misses its counts.
    assert!(!warnings.contains(&"poor_fit"), "{warnings:?}");
    for path in ["/v1/forecasts", "/v1/fits"] {
        let content = &DOCUMENT["paths"][path]["post"]["requestBody"]["content"]["application/json"];
        service.post(path, &content["example"]).await.expect(201);
    }
    service.put("/v1/networks/{name}", &json!({"degree_kind": "received"})).await.expect(400);
    let network = "/v1/networks/heronsgate";
    let example = |path: &str, method: &str| {
        DOCUMENT["paths"][path][method]["requestBody"]["content"]["application/json"]["example"].clone()
    };
    service.put(network, &example("/v1/networks/{name}", "put")).await.expect(201);
    let counts = &example("/v1/fits", "post")["snapshots"][0]["degree_counts"];
    service.put(&format!("{network}/snapshots/2026-06-01"), &json!({"degree_counts": counts})).await.expect(201);
    for runs in ["forecasts", "fits"] {
        let body = example(&format!("/v1/networks/{{name}}/{runs}"), "post");
        service.post(&format!("{network}/{runs}"), &body).await.expect(201);
    }
    for (body, forms) in [("ForecastRequestBody", 2), ("ArrivalsBody", 3), ("HorizonBody", 2)] {
        assert_eq!(DOCUMENT["components"]["schemas"][body]["oneOf"].as_array().map(Vec::len), Some(forms), "{body}");
    }
    assert!(DOCUMENT["components"]["schemas"]["NetworkForecastBody"]["not"].is_object());
}

#[test]
fn every_operation_says_what_it_does_and_how_it_fails() {
    for (path, item) in DOCUMENT["paths"].as_object().unwrap() {
        for (method, operation) in item.as_object().unwrap() {
            let name = format!("{method} {path}");
            assert!(operation["summary"].as_str().is_some_and(|text| !text.is_empty()), "{name}");
            for (status, response) in operation["responses"].as_object().unwrap() {
                assert!(response["description"].as_str().is_some_and(|text| !text.is_empty()), "{name} {status}");
                if status.starts_with(['4', '5']) {
                    let schema = &response["content"]["application/problem+json"]["schema"]["$ref"];
                    assert_eq!(schema, "#/components/schemas/Problem", "{name} {status}");
                }
            }
        }
    }
}

/// A reference that leads nowhere breaks generated clients.
#[test]
fn every_reference_leads_somewhere() {
    fn walk(value: &Value, found: &mut Vec<String>) {
        match value {
            Value::Object(fields) => {
                found.extend(fields.get("$ref").and_then(Value::as_str).map(str::to_owned));
                fields.values().for_each(|inner| walk(inner, found));
            }
            Value::Array(items) => items.iter().for_each(|inner| walk(inner, found)),
            _ => {}
        }
    }
    let mut references = Vec::new();
    walk(&DOCUMENT, &mut references);
    assert!(!references.is_empty());
    for reference in references {
        assert!(DOCUMENT.pointer(reference.trim_start_matches('#')).is_some(), "{reference}");
    }
}

//! Answers and examples held against the schemas of the OpenAPI document, which are JSON Schema 2020-12 (crate `jsonschema`).

use std::collections::HashMap;
use std::sync::{Arc, LazyLock, Mutex};

use jsonschema::Validator;
use serde_json::{Value, json};

use crate::harness::DOCUMENT;

/// Validators by the text of their schemas.
static KNOWN: LazyLock<Mutex<HashMap<String, Arc<Validator>>>> = LazyLock::new(Mutex::default);

fn validator(schema: &Value) -> Arc<Validator> {
    let mut known = KNOWN.lock().unwrap();
    known
        .entry(schema.to_string())
        .or_insert_with(|| {
            // References lead from the root of the document.
            let whole = json!({
                "$schema": "https://json-schema.org/draft/2020-12/schema",
                "components": DOCUMENT["components"],
                "allOf": [schema],
            });
            Arc::new(jsonschema::validator_for(&whole).unwrap())
        })
        .clone()
}

/// What is wrong with a value by a schema of the document.
pub fn faults(schema: &Value, value: &Value) -> Vec<String> {
    validator(schema).iter_errors(value).map(|error| format!("{}: {error}", error.instance_path())).collect()
}

/// Every schema with its examples, and every body and parameter with its own.
fn examples() -> Vec<(String, Value, Value)> {
    fn walk(place: String, value: &Value, found: &mut Vec<(String, Value, Value)>) {
        match value {
            Value::Object(fields) => {
                // Of a schema a list; beside a schema, as `example` or named ones.
                let described = fields.get("schema");
                let (own, other) = (fields.get("example"), fields.get("examples"));
                match (described, other) {
                    (Some(schema), other) => {
                        let named =
                            other.and_then(Value::as_object).into_iter().flatten().map(|(_, one)| &one["value"]);
                        found.extend(
                            own.into_iter().chain(named).map(|one| (place.clone(), schema.clone(), one.clone())),
                        );
                    }
                    (None, Some(Value::Array(list))) => {
                        found.extend(list.iter().map(|one| (place.clone(), value.clone(), one.clone())));
                    }
                    _ => {}
                }
                fields.iter().for_each(|(name, inner)| walk(format!("{place}/{name}"), inner, found));
            }
            Value::Array(items) => {
                items.iter().enumerate().for_each(|(i, inner)| walk(format!("{place}/{i}"), inner, found));
            }
            _ => {}
        }
    }
    let mut found = Vec::new();
    walk(String::new(), &DOCUMENT, &mut found);
    found
}

#[test]
fn every_example_is_of_its_schema() {
    let examples = examples();
    assert!(examples.len() > 60, "{}", examples.len());
    for (place, schema, example) in examples {
        let faults = faults(&schema, &example);
        assert!(faults.is_empty(), "{place}: {example}: {faults:?}");
    }
}

#[test]
fn every_body_has_an_example() {
    for (path, item) in DOCUMENT["paths"].as_object().unwrap() {
        for (method, operation) in item.as_object().unwrap() {
            for (kind, content) in operation["requestBody"]["content"].as_object().into_iter().flatten() {
                assert!(content["example"] != Value::Null, "{method} {path} {kind}");
            }
        }
    }
}

#[test]
fn what_is_wrong_is_found() {
    let schema = &json!({"$ref": "#/components/schemas/HorizonBody"});
    assert_eq!(faults(schema, &json!({"until": "2027-06-01", "every": "P1M"})), Vec::<String>::new());
    for wrong in [json!({"until": 7, "every": "P1M"}), json!({"until": "2027-06-01", "each": "P1M"}), json!([])] {
        assert!(!faults(schema, &wrong).is_empty(), "{wrong}");
    }
}

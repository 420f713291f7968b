//! Whatever JSON comes, reading it ends in inputs or in a problem.

use proptest::prelude::*;
use serde_json::{Map, Value, json};
use tailcast::api::{FORECAST_FIELDS, read_fit, read_forecast, read_json};
use tailcast::config::Config;

use crate::harness::{changed, forecast_body};

fn any_number() -> impl Strategy<Value = Value> {
    prop_oneof![
        any::<u64>().prop_map(|n| json!(n)),
        any::<i64>().prop_map(|n| json!(n)),
        any::<f64>().prop_map(|x| json!(x)),
        prop::sample::select(vec![json!(0), json!(-0.0), json!(1e308), json!(5e-324), json!(9007199254740993u64)]),
    ]
}

fn any_text() -> impl Strategy<Value = Value> {
    prop_oneof![
        any::<String>().prop_map(Value::from),
        prop::sample::select(vec![
            "NaN",
            "2026-12-01",
            "-000001-01-01",
            "9999-12-31T23:59:60Z",
            "P1M",
            "PT0.1S",
            "P999999Y"
        ])
        .prop_map(Value::from),
    ]
}

/// JSON values up to four levels deep.
fn any_json() -> impl Strategy<Value = Value> {
    let leaf = prop_oneof![Just(Value::Null), any::<bool>().prop_map(Value::from), any_number(), any_text()];
    leaf.prop_recursive(4, 64, 6, |inner| {
        let name = prop_oneof![
            prop::sample::select(vec!["as_of", "degree_counts", "per_day", "segments", "from", "until", "every"])
                .prop_map(str::to_owned),
            any::<String>(),
        ];
        prop_oneof![
            prop::collection::vec(inner.clone(), 0..6).prop_map(Value::from),
            prop::collection::vec((name, inner), 0..6)
                .prop_map(|fields| Value::Object(fields.into_iter().collect::<Map<_, _>>())),
        ]
    })
}

fn check(text: &[u8]) -> Result<(), TestCaseError> {
    let limits = Config::from_sources(None, std::iter::empty()).unwrap().limits;
    let as_forecast = read_json(text, |raw, faults| read_forecast(raw, &limits, faults)).map(drop);
    let as_fit = read_json(text, |raw, faults| read_fit(raw, &limits, faults)).map(drop);
    for refused in [as_forecast, as_fit].into_iter().filter_map(Result::err) {
        let problem = refused.into_problem();
        prop_assert!(["malformed_json", "invalid_request"].contains(&problem.code()), "{problem:?}");
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 2_000, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_value_in_any_field(value in any_json(), field in prop::sample::select(FORECAST_FIELDS.to_vec())) {
        check(changed(forecast_body(), &format!("/{field}"), value).to_string().as_bytes())?;
    }

    #[test]
    fn any_pairs(pairs in any_json()) {
        check(changed(forecast_body(), "/snapshots/0/degree_counts", json!([[1, 2], pairs])).to_string().as_bytes())?;
    }

    #[test]
    fn any_rows_of_evidence(rows in any_json(), list in prop::sample::select(vec!["ratios", "windows"])) {
        let table = json!([{"from": "2026-05-01", "to": "2026-06-01", "counts": [[0, null, 2], rows]}]);
        check(changed(forecast_body(), "/transitions", table).to_string().as_bytes())?;
        let events = json!({"ratios": [[1, 0, 5]], "windows": [{"cells": [rows]}]});
        check(changed(forecast_body(), "/link_events", changed(events, &format!("/{list}"), rows)).to_string().as_bytes())?;
    }

    #[test]
    fn any_horizon(until in any_text(), every in any_text()) {
        let body = changed(forecast_body(), "/dates", Value::Null);
        check(changed(body, "/horizon", json!({"until": until, "every": every})).to_string().as_bytes())?;
    }

    #[test]
    fn any_bytes(bytes in prop::collection::vec(any::<u8>(), 0..200), cut in 0usize..2_000) {
        check(&bytes)?;
        let mut spliced = forecast_body().to_string().into_bytes();
        let at = cut % spliced.len();
        spliced.splice(at..at, bytes);
        check(&spliced)?;
    }
}

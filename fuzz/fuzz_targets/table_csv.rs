#![no_main]
//! CSV tables of degree counts and of moves, and one of arrivals' segments within JSON: read, or refused line by line.

use std::sync::LazyLock;

use libfuzzer_sys::fuzz_target;
use serde_json::json;
use tailcast::api::{faultless, read_json, read_network, read_snapshot_csv, read_transitions_csv};
use tailcast::config::{Config, LimitsConfig};

static LIMITS: LazyLock<LimitsConfig> =
    LazyLock::new(|| Config::from_sources(None, std::iter::empty()).expect("the defaults").limits);

fuzz_target!(|data: &[u8]| {
    let limits = &*LIMITS;
    let day = |text: &str| text.parse::<jiff::Timestamp>().expect("a date");
    let (from, to) = (day("2026-05-01T00:00:00Z"), day("2026-06-01T00:00:00Z"));
    let headed = |head: &[u8]| [head, data].concat();
    let counts = headed(b"degree,nodes\n");
    let moves = headed(b"degree_before,degree_after,nodes\n");
    for refused in [
        faultless(|faults| read_snapshot_csv(data, to, limits, faults)).err(),
        faultless(|faults| read_snapshot_csv(&counts, to, limits, faults)).err(),
        faultless(|faults| read_transitions_csv(&moves, (from, to), limits, faults)).err(),
    ] {
        assert!(refused.is_none_or(|error| error.into_problem().code() == "invalid_request"));
    }

    let Ok(text) = std::str::from_utf8(data) else { return };
    let body = json!({
        "degree_kind": "received",
        "forecast_plan": {
            "arrivals": {"csv": format!("from,per_day\n{text}")},
            "thresholds": [10],
            "horizon": {"ends_after": "P1Y", "every": "P1M"},
        },
    })
    .to_string();
    if let Err(error) = read_json(body.as_bytes(), |raw, faults| read_network(raw, limits, faults)) {
        let problem = error.into_problem();
        assert_eq!(problem.code(), "invalid_request", "{problem:?}");
    }
});

//! Examples in the OpenAPI document, in the invented scenario of Heronsgate, a platform for audio posts.

use serde_json::{Value, json};

/// `[degree, nodes]` pairs that growth at a constant mix leads to.
const COUNTS: [(u64, u64); 17] = [
    (0, 5400),
    (1, 1075),
    (2, 416),
    (3, 209),
    (4, 120),
    (5, 76),
    (6, 52),
    (7, 37),
    (8, 27),
    (9, 21),
    (10, 17),
    (12, 24),
    (15, 18),
    (20, 13),
    (30, 8),
    (45, 3),
    (70, 1),
];

/// A request that answers as it stands.
pub fn forecast_request() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": COUNTS}],
        "arrivals": {"per_day": 42.0},
        "thresholds": [5, 10, 50],
        "dates": ["2026-12-01", "2027-06-01"],
        "label": "Heronsgate followers"
    })
}

/// The same network's evidence for a fit.
pub fn fit_request() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": COUNTS}],
        "label": "Heronsgate followers"
    })
}

/// A tracked network's settings.
pub fn network() -> Value {
    json!({"degree_kind": "received", "description": "Followers of the accounts on Heronsgate"})
}

/// What is asked of a forecast of the tracked network.
pub fn network_forecast() -> Value {
    json!({"arrivals": {"per_day": 42.0}, "thresholds": [5, 10, 50], "horizon": {"until": "2027-06-01", "every": "P1M"}})
}

/// What is asked of a fit to the tracked network.
pub fn network_fit() -> Value {
    json!({"model": "mix", "label": "Heronsgate followers"})
}

/// What is asked of a backtest.
pub fn backtest() -> Value {
    json!({"thresholds": [5, 10, 50], "ahead": 3})
}

/// Degree counts at a date.
pub fn snapshot() -> Value {
    json!({"degree_counts": COUNTS})
}

/// Where degrees went between two dates.
pub fn transitions() -> Value {
    json!({"counts": [[0, 0, 4900], [0, 1, 300], [1, 2, 90], [null, 0, 1200], [7, null, 2]]})
}

/// What a link list tells of attachment.
pub fn link_events() -> Value {
    json!({
        "ratios": [[0.5, 0.001, 20], [1.0, 0.002, 15], [8.0, 0.05, 7]],
        "windows": [{"cells": [[0, 0, 12, 54000.0, 0.0], [1, 3, 30, 22000.0, 41000.0]]}]
    })
}

/// A problem with two faults.
pub fn problem() -> Value {
    json!({
        "type": "about:blank",
        "title": "Bad Request",
        "status": 400,
        "code": "invalid_request",
        "detail": "The request was understood but parts of it are wrong; errors lists each with its place.",
        "instance": "/v1/forecasts",
        "request_id": "01a231cd-6fbd-74cb-ab23-3d82735b9d3d",
        "errors": [
            {"pointer": "/snapshots/0/degree_counts/3/1", "detail": "1.5 is not a whole number"},
            {"pointer": "/thresholdz", "detail": "there is no field \"thresholdz\"; did you mean \"thresholds\"?"}
        ]
    })
}

//! Examples in the OpenAPI document, in the invented scenario of Heronsgate, a platform for audio posts.

use serde_json::{Value, json};

/// A request that answers as it stands.
pub fn forecast_request() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[0, 5400], [1, 2210], [2, 990], [40, 3]]}],
        "arrivals": {"per_day": 42.0},
        "links_per_arrival": 3.1,
        "thresholds": [10, 100, 1000],
        "dates": ["2026-12-01", "2027-06-01"],
        "label": "Heronsgate followers"
    })
}

/// The same network's evidence for a fit.
pub fn fit_request() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[0, 5400], [1, 2210], [2, 990], [40, 3]]}],
        "links_per_arrival": 3.1,
        "label": "Heronsgate followers"
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

//! Input that is wrong: each gets a precise problem document, never a panic, a hang or a number that is none.

use reqwest::Method;
use reqwest::header::CONTENT_TYPE;
use serde_json::{Value, json};

use crate::harness::{Service, answered, changed, fit_body, forecast_body};

/// A fault put into a sound forecast body: the pointer where it is put, the value, and where and how it is reported.
type Case = (&'static str, Value, &'static str, &'static str);

fn cases() -> Vec<Case> {
    let counts = "/snapshots/0/degree_counts";
    vec![
        ("/degree_kind", json!("followers"), "/degree_kind", "received"),
        ("/degree_kind", json!(1), "/degree_kind", "string"),
        ("/snapshots", json!([]), "/snapshots", "at least one"),
        ("/snapshots", json!({}), "/snapshots", "array"),
        ("/snapshots", json!([7]), "/snapshots/0", "object"),
        ("/snapshots/0/as_of", json!("2026-02-30"), "/snapshots/0/as_of", "no time"),
        ("/snapshots/0/as_of", json!("yesterday"), "/snapshots/0/as_of", "2026-12-01"),
        ("/snapshots/0/as_of", json!(20260601), "/snapshots/0/as_of", "string"),
        ("/snapshots/0/asof", json!("2026-06-01"), "/snapshots/0/asof", "did you mean \"as_of\""),
        (counts, json!([]), counts, "no degree has a node"),
        (counts, json!([[5, 0]]), counts, "no degree has a node"),
        (counts, json!([[0, 10], [3, 5], [3, 6]]), "/snapshots/0/degree_counts/2", "twice"),
        (counts, json!([[0, 10], [-3, 5]]), "/snapshots/0/degree_counts/1/0", "negative"),
        (counts, json!([[0, 10], [3, -5]]), "/snapshots/0/degree_counts/1/1", "negative"),
        (counts, json!([[0, 10], [3, 5.5]]), "/snapshots/0/degree_counts/1/1", "not a whole number"),
        (counts, json!([[0, 10], [3.5, 5]]), "/snapshots/0/degree_counts/1/0", "not a whole number"),
        (counts, json!([[0, 10], [3, "NaN"]]), "/snapshots/0/degree_counts/1/1", "not a string"),
        (counts, json!([[0, 10], [3, null]]), "/snapshots/0/degree_counts/1/1", "not null"),
        (counts, json!([[0, 10], [3]]), "/snapshots/0/degree_counts/1", "2 numbers"),
        (counts, json!([[0, 10], [3, 4, 5]]), "/snapshots/0/degree_counts/1", "2 numbers"),
        (counts, json!([[0, 10], {"3": 4}]), "/snapshots/0/degree_counts/1", "pair"),
        (counts, json!({"0": 10}), counts, "array"),
        (counts, json!([[9007199254740992u64, 1]]), "/snapshots/0/degree_counts/0", "9007199254740991"),
        (counts, json!([[0, u64::MAX], [1, 1]]), counts, "2^64 - 1"),
        ("/arrivals", json!(42), "/arrivals", "object"),
        ("/arrivals", json!({}), "/arrivals", "\"per_day\" is missing"),
        ("/arrivals/per_day", json!(-1), "/arrivals/per_day", "between 0"),
        ("/arrivals/per_day", json!("NaN"), "/arrivals/per_day", "number"),
        ("/arrivals/growth_per_year", json!(-1), "/arrivals/growth_per_year", "above -1"),
        ("/arrivals/segments", json!([]), "/arrivals", "not both"),
        ("/arrivals", json!({"segments": []}), "/arrivals/segments", "at least one"),
        (
            "/arrivals",
            json!({"segments": [{"from": "2026-07-01", "per_day": 1}]}),
            "/arrivals/segments/0/from",
            "at or before",
        ),
        (
            "/arrivals",
            json!({"segments": [{"from": "2026-05-01", "per_day": 1}, {"from": "2026-06-01", "per_day": -2}]}),
            "/arrivals/segments/1/per_day",
            "between 0",
        ),
        ("/arrivals/months", json!([1, 1]), "/arrivals/months", "twelve factors"),
        ("/arrivals/months", json!([1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, -1]), "/arrivals/months/11", "between 0 and 1000"),
        ("/arrivals/months", json!([1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, null]), "/arrivals/months/11", "not null"),
        ("/arrivals/weeks", json!([47]), "/arrivals/weeks", "object"),
        ("/arrivals/weeks", json!({"54": 2}), "/arrivals/weeks/54", "no ISO week"),
        ("/arrivals/weeks", json!({"7": 2, "07": 3}), "/arrivals/weeks/7", "twice"),
        ("/arrivals/weeks", json!({"47": 1001}), "/arrivals/weeks/47", "between 0 and 1000"),
        (
            "/arrivals/campaigns",
            json!([{"from": "2026-11-20", "factor": 2}]),
            "/arrivals/campaigns/0",
            "\"until\" is missing",
        ),
        (
            "/arrivals/campaigns",
            json!([{"from": "2026-11-20", "until": "2026-11-20", "factor": 2}]),
            "/arrivals/campaigns/0/until",
            "not after its start",
        ),
        (
            "/arrivals/campaigns",
            json!([{"from": "2026-11-20", "until": "2026-11-21", "factor": -2}]),
            "/arrivals/campaigns/0/factor",
            "2 doubles it",
        ),
        ("/arrivals/range", json!([60, 70]), "/arrivals/range", "low ≤ per_day"),
        ("/arrivals/range", json!([60]), "/arrivals/range", "two numbers"),
        ("/arrivals/standard_deviation", json!(-1), "/arrivals/standard_deviation", "0 or more"),
        ("/arrivals/relative_deviation", json!(1e9), "/arrivals/relative_deviation", "at most 7.4"),
        ("/arrivals", json!({"per_day": 1, "range": [0.5, 2], "relative_deviation": 0.1}), "/arrivals", "not several"),
        (
            "/arrivals",
            json!({"segments": [{"from": "2026-05-01", "per_day": 1}], "range": [1, 2]}),
            "/arrivals/range",
            "with segments give relative_deviation",
        ),
        ("/arrivals", json!({"csv": "from,per_day\n2026-06-01,x\n"}), "/arrivals/csv", "line 2: per_day is \"x\""),
        ("/arrivals", json!({"csv": "from,per_day\n2026-07-01,4\n"}), "/arrivals/csv", "line 2: from: the first"),
        (
            "/arrivals",
            json!({"csv": "from,per_day\n2026-05-01,4\n\n2026-06-01,-1\n"}),
            "/arrivals/csv",
            "line 4: per_day",
        ),
        ("/arrivals", json!({"csv": "from,per_day\n"}), "/arrivals/csv", "no segment"),
        ("/arrivals", json!({"csv": 7}), "/arrivals/csv", "string"),
        ("/arrivals/csv", json!("from,per_day\n"), "/arrivals", "not both"),
        ("/links_per_arrival", json!(-0.5), "/links_per_arrival", "links_per_arrival must lie between 0"),
        ("/links_per_arrival", json!(1e300), "/links_per_arrival", "not 1e300"),
        ("/links_per_arrival", json!(true), "/links_per_arrival", "not a boolean"),
        ("/links_per_node_day", json!(-1), "/links_per_node_day", "links_per_node_day must"),
        ("/departures_per_node_day", json!([]), "/departures_per_node_day", "not an array"),
        ("/link_losses_per_link_day", json!(-1), "/link_losses_per_link_day", "between 0"),
        ("/entry_degrees", json!([[0, 0.5], [1, 0.4]]), "/entry_degrees", "add up"),
        ("/entry_degrees", json!([]), "/entry_degrees", "empty"),
        ("/entry_degrees", json!([[0, 0.3333], [1, 0.6666]]), "/entry_degrees", "more digits"),
        ("/entry_degrees", json!([[0, 1.5]]), "/entry_degrees/0", "between 0 and 1"),
        ("/entry_degrees", json!([[0, 0.5], [0, 0.5]]), "/entry_degrees/1", "twice"),
        ("/entry_degrees", json!([[0.5, 1]]), "/entry_degrees/0/0", "not a whole number"),
        ("/thresholds", json!([]), "/thresholds", "at least one"),
        ("/thresholds", json!([10, 0]), "/thresholds/1", "between 1"),
        ("/thresholds", json!([9007199254740992u64]), "/thresholds/0", "9007199254740991 (2^53 - 1)"),
        ("/thresholds", json!([1.5]), "/thresholds/0", "not a whole number"),
        ("/thresholds", json!([-5]), "/thresholds/0", "negative"),
        ("/thresholds", json!(["10"]), "/thresholds/0", "without quotes"),
        ("/thresholds", json!((1..=1001).collect::<Vec<_>>()), "/thresholds", "more than"),
        ("/dates", json!([]), "/dates", "at least one"),
        ("/dates", json!(["2026-07-01", "2026-05-01"]), "/dates/1", "not after the last snapshot"),
        ("/dates", json!(["2026-06-01"]), "/dates/0", "not after the last snapshot"),
        ("/dates", json!(["2526-06-01"]), "/dates/0", "more than"),
        ("/dates", json!(["9999-12-31"]), "/dates/0", "out of range"),
        ("/dates", json!(["soon"]), "/dates/0", "no time"),
        ("/horizon", json!({"until": "2027-01-01", "every": "P1M"}), "", "not both"),
        ("/levels", json!([0.5, 1.0]), "/levels/1", "at most 0.9999"),
        ("/levels", json!([]), "/levels", "at least one"),
        ("/levels", json!(["0.9"]), "/levels/0", "without quotes"),
        ("/model", json!("magic"), "/model", "auto"),
        ("/model", json!(["auto"]), "/model", "string"),
        ("/fixed", json!({"preferential_share": 1.01}), "/fixed/preferential_share", "between 0 and 1"),
        ("/fixed", json!({}), "/fixed", "nothing is given"),
        ("/fixed", json!({"kernel_exponent": 2.5}), "/fixed/kernel_exponent", "between 0 and 2"),
        ("/fixed", json!({"dormant_share": 1.0}), "/fixed/dormant_share", "between 0 and 0.99"),
        ("/fixed", json!({"growth_variance": -1.0}), "/fixed/growth_variance", "between 0 and 6"),
        ("/fixed", json!({"growth_variance": 1.0, "dormant_share": 0.1}), "/fixed", "exclude each other"),
        ("/evidence", json!("hearsay"), "/evidence", "one_snapshot"),
        ("/fixed", json!({"share": 0.5, "preferential_share": 0.5}), "/fixed/share", "no field"),
        ("/seed", json!(-1), "/seed", "seed starts at 0"),
        ("/seed", json!(9007199254740992u64), "/seed", "largest allowed"),
        ("/label", json!("a\u{0}b"), "/label", "NUL"),
        ("/label", json!("x".repeat(201)), "/label", "200"),
        ("/label", json!(5), "/label", "string"),
        ("/thresholdz", json!([1]), "/thresholdz", "did you mean \"thresholds\""),
        ("/transition", json!([]), "/transition", "did you mean \"transitions\""),
        ("/transitions", json!({}), "/transitions", "array"),
        ("/transitions", json!([[0, 1, 2]]), "/transitions/0", "object"),
        ("/transitions", json!([{"from": "2026-05-01", "counts": [[0, 1, 1]]}]), "/transitions/0", "\"to\" is missing"),
        (
            "/transitions",
            table("2026-06-01", "2026-05-01", json!([[0, 1, 1]])),
            "/transitions/0",
            "not after its start",
        ),
        ("/transitions", table("2026-05-01", "soon", json!([[0, 1, 1]])), "/transitions/0/to", "no time"),
        ("/transitions", sound_dates(json!([])), "/transitions/0", "no node was there at the start"),
        ("/transitions", sound_dates(json!([[null, 1, 5]])), "/transitions/0", "no node was there at the start"),
        (
            "/transitions",
            sound_dates(json!([[0, 1, 1], [null, null, 1]])),
            "/transitions/0/counts/1",
            "tells of nobody",
        ),
        ("/transitions", sound_dates(json!([[0, 1, 1], [0, 1, 2]])), "/transitions/0/counts/1", "same pair"),
        ("/transitions", sound_dates(json!([[0, 1, null]])), "/transitions/0/counts/0/2", "not null"),
        ("/transitions", sound_dates(json!([[0, -1, 1]])), "/transitions/0/counts/0/1", "negative"),
        ("/transitions", sound_dates(json!([[0.5, 1, 1]])), "/transitions/0/counts/0/0", "not a whole number"),
        ("/transitions", sound_dates(json!([[0, "", 1]])), "/transitions/0/counts/0/1", "not a string"),
        ("/transitions", sound_dates(json!([[0, 1]])), "/transitions/0/counts/0", "3 entries, not 2"),
        ("/transitions", sound_dates(json!([{"before": 0}])), "/transitions/0/counts/0", "row"),
        (
            "/transitions",
            sound_dates(json!([[9007199254740992u64, 1, 1]])),
            "/transitions/0/counts/0",
            "9007199254740991",
        ),
        ("/transitions", sound_dates(json!([[0, 1, u64::MAX], [0, 2, 1]])), "/transitions/0", "2^64 - 1"),
        // The snapshot of that date has other counts.
        ("/transitions", sound_dates(json!([[0, 1, 5]])), "/transitions/0", "other degree counts than the snapshot"),
        ("/transitions", table("2026-05-01", "2026-07-01", json!([[0, 1, 5]])), "/transitions/0", "after the newest"),
        ("/link_events", json!([]), "/link_events", "object"),
        ("/link_events", json!({"ratios": [[1, 0, 5]]}), "/link_events", "\"windows\" is missing"),
        ("/link_events", json!({"ratios": [[1, 0]], "windows": []}), "/link_events/ratios/0", "3 numbers, not 2"),
        ("/link_events", json!({"ratios": [[null, 0, 1]], "windows": []}), "/link_events/ratios/0/0", "not null"),
        ("/link_events", json!({"ratios": [], "windows": []}), "/link_events/ratios", "no link landed"),
        (
            "/link_events",
            json!({"ratios": [[1, 0, 5]], "windows": [{"cells": [[0, 0, 1, 1, 0], [0, 1, 1, 1, 0]]}]}),
            "/link_events/windows/0",
            "ascending",
        ),
    ]
}

fn table(from: &str, to: &str, counts: Value) -> Value {
    json!([{"from": from, "to": to, "counts": counts}])
}

/// A table that ends at the date of the snapshot.
fn sound_dates(counts: Value) -> Value {
    table("2026-05-01", "2026-06-01", counts)
}

#[tokio::test]
async fn each_fault_is_reported_at_its_place() {
    let service = Service::start().await;
    for (put_at, value, place, words) in cases() {
        let body = changed(forecast_body(), put_at, value.clone());
        // Null means a field taken away here; a null that is meant stands inside its list.
        let answer = service.post("/v1/forecasts", &body).await.expect_problem(400, "invalid_request");
        let errors = answer.json()["errors"].as_array().cloned().unwrap_or_default();
        let reported = errors.iter().any(|error| {
            error["pointer"] == place && error["detail"].as_str().is_some_and(|detail| detail.contains(words))
        });
        assert!(reported && errors.len() == 1, "{put_at} = {value}: {}", answer.text);
    }
}

#[tokio::test]
async fn numbers_that_json_text_can_disguise() {
    let service = Service::start().await;
    for (number, place, words) in [
        ("1e400", "/snapshots/0/degree_counts/0/1", "2^64 - 1"),
        ("18446744073709551616", "/snapshots/0/degree_counts/0/1", "2^64 - 1"),
        ("-1e400", "/snapshots/0/degree_counts/0/1", "negative"),
        ("1e-400", "", ""),
        ("0.1e1", "", ""),
    ] {
        let text = fit_body().to_string().replacen("[[0,", &format!("[[0,{number}],[77777,"), 1);
        let answer = service.post_text("/v1/fits", text).await;
        if place.is_empty() {
            assert_ne!(answer.status, 400, "{number}: {}", answer.text);
        } else {
            let answer = answer.expect_problem(400, "invalid_request");
            assert_eq!(answer.places(), [place], "{number}");
            assert!(answer.text.contains(words), "{number}: {}", answer.text);
        }
    }
    for (number, words) in [("1e400", "too large"), ("null", "leave the field out"), ("\"Infinity\"", "without quotes")]
    {
        let text =
            fit_body().to_string().replacen("\"links_per_arrival\":3.0", &format!("\"links_per_arrival\":{number}"), 1);
        let answer = service.post_text("/v1/fits", text).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), ["/links_per_arrival"]);
        assert!(answer.text.contains(words), "{number}: {}", answer.text);
    }
}

#[tokio::test]
async fn all_faults_come_at_once() {
    let service = Service::start().await;
    let body = changed(forecast_body(), "/snapshots/0/degree_counts", json!([[0, -1], [1, 2.5]]));
    let body = changed(body, "/dates", json!(["2020-01-01"]));
    let body = changed(body, "/thresholds", json!([0]));
    let body = changed(body, "/typo", json!(1));
    let body = changed(body, "/degree_kind", Value::Null);
    let answer = service.post("/v1/forecasts", &body).await.expect_problem(400, "invalid_request");
    let mut places = answer.places();
    places.sort();
    let expected =
        ["", "/dates/0", "/snapshots/0/degree_counts/0/1", "/snapshots/0/degree_counts/1/1", "/thresholds/0", "/typo"];
    assert_eq!(places, expected, "{}", answer.text);
}

#[tokio::test]
async fn each_wrong_threshold_is_told_and_a_needed_null_is_not_waved_through() {
    let service = Service::start().await;
    let text = forecast_body().to_string().replacen("[10,50]", "[0, 9007199254740992, 18446744073709551616, 1e300]", 1);
    let answer = service.post_text("/v1/forecasts", text).await.expect_problem(400, "invalid_request");
    let mut places = answer.places();
    places.sort();
    assert_eq!(places, ["/thresholds/0", "/thresholds/1", "/thresholds/2", "/thresholds/3"], "{}", answer.text);
    assert!(!answer.text.contains("2^64"), "{}", answer.text);
    let text = forecast_body().to_string().replacen("\"per_day\":50.0", "\"per_day\":null", 1);
    let answer = service.post_text("/v1/forecasts", text).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/arrivals/per_day"]);
    assert!(answer.text.contains("is needed") && !answer.text.contains("leave the field out"), "{}", answer.text);
}

#[tokio::test]
async fn zero_has_one_spelling_in_the_digest() {
    let service = Service::start().await;
    let mut digests = Vec::new();
    for zero in ["0", "-0", "-0.0"] {
        let text = format!("{{\"departures_per_node_day\":{zero},{}", &fit_body().to_string()[1..]);
        let run = service.post_text("/v1/fits", text).await.expect(201).json();
        digests.push(run["inputs_digest"].clone());
    }
    assert!(digests.iter().all(|digest| *digest == digests[0]), "{digests:?}");
}

#[tokio::test]
async fn thousands_of_faults_are_counted_not_listed() {
    let service = Service::start().await;
    let wrong: Vec<(u64, i64)> = (0..5000).map(|degree| (degree, -1)).collect();
    let body = changed(fit_body(), "/snapshots/0/degree_counts", json!(wrong));
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places().len(), 100);
    let repeated: Vec<(u64, u64)> = (0..5000).map(|_| (3, 1)).collect();
    let body = changed(fit_body(), "/snapshots/0/degree_counts", json!(repeated));
    let answer = service.post("/v1/fits", &body).await.expect_problem(400, "invalid_request");
    assert!(answer.text.contains("4899 more are not listed"), "{}", answer.text);
}

#[tokio::test]
async fn text_that_is_no_json_object() {
    let service = Service::start().await;
    for (text, words) in [
        ("", "empty"),
        ("  \n", "empty"),
        ("{", "breaks off"),
        (&forecast_body().to_string()[..200], "breaks off"),
        ("{\"seed\": NaN}", "not JSON"),
        ("{\"seed\": 01}", "not JSON"),
        ("{\"seed\": 1} {}", "not JSON"),
        ("{'seed': 1}", "line 1 column 2"),
    ] {
        let answer = service.post_text("/v1/forecasts", text.to_owned()).await.expect_problem(400, "malformed_json");
        assert!(answer.text.contains(words), "{text}: {}", answer.text);
    }
    let answer = service.post_text("/v1/forecasts", vec![b'{', 0xff, b'}']).await.expect_problem(400, "malformed_json");
    assert!(answer.text.contains("UTF-8"));
    for text in ["[]", "7", "\"text\"", "null", "true"] {
        let answer = service.post_text("/v1/forecasts", text).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [""], "{text}");
    }
    let twice = r#"{"degree_kind": "received", "degree_kind": "total"}"#;
    let answer = service.post_text("/v1/forecasts", twice).await.expect_problem(400, "invalid_request");
    assert!(answer.text.contains("given twice"));
    let nested = "[".repeat(100_000) + &"]".repeat(100_000);
    service.post_text("/v1/forecasts", nested.clone()).await.expect(400);
    let inside = format!("{{\"snapshots\": [{nested}], \"levels\": {nested}}}");
    service.post_text("/v1/forecasts", inside).await.expect(400);
    let many = format!("{{{}\"seed\": 1}}", "\"a\": 1, ".repeat(100_000));
    service.post_text("/v1/forecasts", many).await.expect_problem(400, "invalid_request");
    let mark = format!("\u{feff}{}", fit_body());
    service.post_text("/v1/fits", mark).await.expect(201);
}

#[tokio::test]
async fn media_types() {
    let service = Service::start().await;
    let post = |kind: &'static str| {
        answered(service.request(Method::POST, "/v1/fits").header(CONTENT_TYPE, kind).body(fit_body().to_string()))
    };
    for kind in
        ["text/plain", "text/csv", "application/x-www-form-urlencoded", "application/json; charset=latin1", "json"]
    {
        post(kind).await.expect_problem(415, "unsupported_media_type");
    }
    for kind in ["application/json; charset=UTF-8", "Application/JSON", "application/vnd.api+json"] {
        post(kind).await.expect(201);
    }
    let bare = service.request(Method::POST, "/v1/fits").body(fit_body().to_string());
    answered(bare).await.expect_problem(415, "unsupported_media_type");
    for (encoding, status) in [("gzip", 415), ("identity, br", 415), ("Identity", 201)] {
        let request = service.request(Method::POST, "/v1/fits").header(CONTENT_TYPE, "application/json");
        let answer = answered(request.header("content-encoding", encoding).body(fit_body().to_string())).await;
        let answer = answer.expect(status);
        assert_eq!(answer.header("accept-encoding"), if status == 415 { "identity" } else { "" });
    }
    let run = post("application/json").await.expect(201);
    for accept in ["image/png", "text/plain", "application/json;q=0"] {
        service.get_with(run.header("location"), "accept", accept).await.expect_problem(406, "not_acceptable");
    }
    service.get(&format!("{}?format=pdf", run.header("location"))).await.expect_problem(400, "invalid_request");
    service.get(&format!("{}?formt=csv", run.header("location"))).await.expect_problem(400, "invalid_request");
}

#[tokio::test]
async fn what_is_well_formed_but_has_no_answer() {
    let service = Service::start().await;
    let body = changed(forecast_body(), "/arrivals", Value::Null);
    let answer = service.post("/v1/forecasts", &body).await.expect_problem(422, "arrivals_required");
    assert_eq!(answer.places(), ["/arrivals"]);
    // Extreme networks: a right answer or a problem that says why there is none, and nothing else.
    for counts in [
        json!([[0, 1]]),
        json!([[0, 1000]]),
        json!([[7, 1]]),
        json!([[9007199254740991u64, 1]]),
        json!([[1, u64::MAX]]),
    ] {
        for (pointer, value) in
            [("/arrivals/per_day", json!(50)), ("/arrivals", json!({"per_day": 0})), ("/arrivals/per_day", json!(1e15))]
        {
            let body =
                changed(changed(forecast_body(), "/snapshots/0/degree_counts", counts.clone()), pointer, value.clone());
            let answer = service.post("/v1/forecasts", &body).await;
            assert!([201, 422].contains(&answer.status), "{counts} {pointer} = {value}: {}", answer.text);
        }
    }
}

#[tokio::test]
async fn unknown_routes_and_methods() {
    let service = Service::start().await;
    for path in ["/v2", "/v1", "/v1/forecasts/", "/v1/forecasts/a/b", "/favicon.ico", "/%00", "/v1/forecasts/%E2%82"] {
        let answer = service.get(path).await;
        assert!([400, 404].contains(&answer.status), "{path}: {}", answer.text);
    }
    for id in ["none", "0", "a%00b", "01a231cd-6fbd-74cb-ab23-3d832b2bafba"] {
        service.get(&format!("/v1/forecasts/{id}")).await.expect_problem(404, "not_found");
    }
    for query in ["label=%ff", "%ff=1", "label=a%C3"] {
        service.get(&format!("/v1/fits?{query}")).await.expect_problem(400, "invalid_request");
    }
    service.get("/v1/fits?label=%C3%A9%25ff%2").await.expect(200);
    for (method, path, allowed) in [
        (Method::PUT, "/v1/forecasts", "POST"),
        (Method::POST, "/v1/forecasts/x", "DELETE"),
        (Method::POST, "/livez", "GET"),
        (Method::PATCH, "/v1/fits", "POST"),
    ] {
        let answer = service.send(method, path).await.expect_problem(405, "method_not_allowed");
        assert!(answer.header("allow").contains(allowed), "{path}: {}", answer.header("allow"));
    }
}

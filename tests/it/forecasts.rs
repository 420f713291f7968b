//! `/v1/forecasts`: the answer, its forms, its validators, its deletion.

use reqwest::Method;
use reqwest::header::CONTENT_TYPE;
use serde_json::{Value, json};

use crate::harness::{COUNTS, Service, answered, changed, forecast_body, pairs};

#[tokio::test]
async fn a_forecast_is_answered_and_kept() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &changed(forecast_body(), "/label", json!("first"))).await.expect(201);
    let run = posted.json();
    let location = posted.header("location").to_owned();
    assert_eq!(location, format!("/v1/forecasts/{}", run["id"].as_str().unwrap()));
    assert_eq!((&run["label"], &run["network"], &run["seed"]), (&json!("first"), &Value::Null, &json!(1)));
    assert_eq!(run["engine"], format!("tailcast {}", env!("CARGO_PKG_VERSION")));
    assert!(run["inputs_digest"].as_str().unwrap().starts_with("sha-256:"));
    assert_eq!(run["limits"], json!([]));
    assert_eq!(run["fit"]["evidence"], "one_snapshot");
    let dates: Vec<&Value> = run["forecast"].as_array().unwrap().iter().map(|at| &at["date"]).collect();
    assert_eq!(dates, ["2026-07-01", "2026-09-01"]);
    for at in run["forecast"].as_array().unwrap() {
        assert_eq!(at["nodes"]["now"], COUNTS[1].nodes());
        for (tail, threshold) in at["tail"].as_array().unwrap().iter().zip([10, 50]) {
            assert_eq!((&tail["threshold"], &tail["now"]), (&json!(threshold), &json!(COUNTS[1].tail_size(threshold))));
            let levels: Vec<&Value> = tail["intervals"].as_array().unwrap().iter().map(|i| &i["level"]).collect();
            assert_eq!(levels, [0.5, 0.9]);
            assert!(tail["intervals"][1]["low"].as_f64() <= tail["median"].as_f64());
            assert!(tail["median"].as_f64() <= tail["intervals"][1]["high"].as_f64());
        }
    }
    assert!(!run["cautions"].as_array().unwrap().is_empty(), "cautions are part of every answer");
    let read = service.get(&location).await.expect(200);
    assert_eq!(read.text, posted.text, "byte for byte");
    assert_eq!(read.header("etag"), posted.header("etag"));
}

#[tokio::test]
async fn equal_inputs_give_equal_bytes_however_they_are_written() {
    let service = Service::start().await;
    let first = service.post("/v1/forecasts", &forecast_body()).await.expect(201).json();
    let mut reversed: Vec<(u64, u64)> = COUNTS[1].iter().collect();
    reversed.reverse();
    let rewritten = changed(forecast_body(), "/snapshots/0/degree_counts", json!(reversed));
    let rewritten = changed(rewritten, "/snapshots/0/as_of", json!("2026-06-01T02:00:00+02:00"));
    let rewritten = changed(rewritten, "/thresholds", json!([50, 10, 10]));
    let rewritten = changed(rewritten, "/levels", json!([0.9, 0.5]));
    let rewritten = changed(rewritten, "/label", json!("the same, differently"));
    let second = service.post("/v1/forecasts", &rewritten).await.expect(201).json();
    for part in ["inputs_digest", "fit", "forecast", "warnings", "cautions"] {
        assert_eq!(first[part].to_string(), second[part].to_string(), "{part}");
    }
    let other = service.post("/v1/forecasts", &changed(forecast_body(), "/thresholds", json!([11]))).await.expect(201);
    assert_ne!(first["inputs_digest"], other.json()["inputs_digest"]);
}

#[tokio::test]
async fn a_horizon_is_spread_by_the_calendar() {
    let service = Service::start().await;
    let body = changed(forecast_body(), "/dates", Value::Null);
    let body = changed(body, "/snapshots/0/as_of", json!("2026-01-31"));
    let body = changed(body, "/horizon", json!({"until": "2026-04-30", "every": "P1M"}));
    let run = service.post("/v1/forecasts", &body).await.expect(201).json();
    let dates: Vec<&Value> = run["forecast"].as_array().unwrap().iter().map(|at| &at["date"]).collect();
    assert_eq!(dates, ["2026-02-28", "2026-03-31", "2026-04-30"]);
}

#[tokio::test]
async fn arrivals_may_be_left_out_with_two_snapshots_and_given_in_segments() {
    let service = Service::start().await;
    let two = json!([
        {"as_of": "2026-05-02", "degree_counts": pairs(&COUNTS[0])},
        {"as_of": "2026-06-01", "degree_counts": pairs(&COUNTS[1])},
    ]);
    let body = changed(changed(forecast_body(), "/snapshots", two), "/arrivals", Value::Null);
    let run = service.post("/v1/forecasts", &body).await.expect(201).json();
    assert!(run["forecast"][0]["nodes"]["expected"].as_f64().is_some());
    let segments = json!({"segments": [
        {"from": "2026-06-01", "per_day": 50.0},
        {"from": "2026-08-01", "per_day": 80.0, "growth_per_year": 0.2},
    ]});
    let body = changed(changed(forecast_body(), "/arrivals", segments), "/fixed", json!({"preferential_share": 0.7}));
    service.post("/v1/forecasts", &body).await.expect(201);
}

#[tokio::test]
async fn whole_numbers_may_be_written_with_a_point() {
    let service = Service::start().await;
    let body = changed(changed(forecast_body(), "/thresholds", json!([10.0, 5e1])), "/seed", json!(1.0));
    let run = service.post("/v1/forecasts", &body).await.expect(201).json();
    let plain = service.post("/v1/forecasts", &forecast_body()).await.expect(201).json();
    assert_eq!(run["inputs_digest"], plain["inputs_digest"]);
}

#[tokio::test]
async fn csv_has_a_row_a_date_and_threshold() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let (location, run) = (posted.header("location"), posted.json());
    let csv = service.get_with(location, "accept", "text/csv").await.expect(200);
    assert!(csv.header("content-type").starts_with("text/csv"));
    let lines: Vec<&str> = csv.text.split("\r\n").collect();
    assert_eq!(lines[0], "date,threshold,now,expected,median,low_50,high_50,low_90,high_90,warnings,cautions");
    assert_eq!(lines.len(), 1 + 2 * 2 + 1, "a header, a row a date and threshold, a last line end");
    let expected = run["forecast"][0]["tail"][0]["expected"].as_f64().unwrap();
    let cells: Vec<&str> = lines[1].split(',').collect();
    assert_eq!((cells[0], cells[1]), ("2026-07-01", "10"));
    assert_eq!(cells[3].parse::<f64>().unwrap(), expected, "the same number to the last digit");
    assert!(
        csv.text.contains(run["cautions"][0].as_str().unwrap().split(',').next().unwrap()),
        "cautions travel along"
    );
    let by_query = service.get(&format!("{location}?format=csv")).await.expect(200);
    assert_eq!(by_query.text, csv.text);
    assert_ne!(csv.header("etag"), posted.header("etag"), "each form has a validator of its own");
    let posted = service.post("/v1/forecasts?format=csv", &forecast_body()).await.expect(201);
    assert!(posted.text.starts_with("date,threshold"));
}

#[tokio::test]
async fn polling_costs_a_304() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let (location, etag) = (posted.header("location"), posted.header("etag"));
    let modified = posted.header("last-modified");
    for (name, value, status) in [
        ("if-none-match", etag.to_owned(), 304),
        ("if-none-match", format!("\"other\", W/{etag}"), 304),
        ("if-none-match", "*".to_owned(), 304),
        ("if-none-match", "\"other\"".to_owned(), 200),
        ("if-modified-since", modified.to_owned(), 304),
        ("if-modified-since", "Thu, 01 Jan 2015 00:00:00 GMT".to_owned(), 200),
    ] {
        let answer = service.get_with(location, name, &value).await.expect(status);
        assert_eq!(answer.header("etag"), etag, "{name}: {value}");
        assert_eq!(answer.header("cache-control"), "private, no-cache");
        assert_eq!(answer.text.is_empty(), status == 304);
    }
    let csv =
        answered(service.request(Method::GET, location).header("accept", "text/csv").header("if-none-match", etag));
    csv.await.expect(200);
}

#[tokio::test]
async fn head_has_the_headers_of_get() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let head = service.send(Method::HEAD, posted.header("location")).await.expect(200);
    assert_eq!(head.header("content-length"), posted.text.len().to_string());
    assert_eq!((head.header("etag"), head.text.as_str()), (posted.header("etag"), ""));
    service.send(Method::HEAD, "/v1/forecasts/none").await.expect(404);
}

#[tokio::test]
async fn a_deleted_run_is_gone_and_a_wrong_if_match_keeps_it() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let (location, etag) = (posted.header("location"), posted.header("etag"));
    let delete = |tag: &str| answered(service.request(Method::DELETE, location).header("if-match", tag));
    delete("\"other\"").await.expect_problem(412, "precondition_failed");
    delete(&format!("W/{etag}")).await.expect_problem(412, "precondition_failed");
    service.get(location).await.expect(200);
    delete(etag).await.expect(204);
    service.get(location).await.expect_problem(404, "not_found");
    service.send(Method::DELETE, location).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn runs_of_another_kind_are_not_found() {
    let service = Service::start().await;
    let posted = service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let as_fit = posted.header("location").replace("forecasts", "fits");
    service.get(&as_fit).await.expect_problem(404, "not_found");
    service.send(Method::DELETE, &as_fit).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn the_same_key_and_body_make_one_run() {
    let service = Service::start().await;
    let post = |path: &'static str, key: &'static str, body: String| {
        let request = service.request(Method::POST, path).header(CONTENT_TYPE, "application/json");
        answered(request.header("idempotency-key", key).body(body))
    };
    let body = forecast_body().to_string();
    let first = post("/v1/forecasts", "k-1", body.clone()).await.expect(201);
    let again = post("/v1/forecasts", "k-1", body.clone()).await.expect(201);
    assert_eq!((&first.text, first.header("location")), (&again.text, again.header("location")));
    let other = changed(forecast_body(), "/thresholds", json!([20])).to_string();
    post("/v1/forecasts", "k-1", other.clone()).await.expect_problem(409, "idempotency_key_reused");
    post("/v1/forecasts", "k-2", other).await.expect(201);
    let together = futures_join(10, || post("/v1/forecasts", "k-3", body.clone())).await;
    assert!(together.iter().all(|answer| answer.status == 201 && answer.text == together[0].text), "also at once");
    assert_eq!(service.get("/v1/forecasts").await.json()["items"].as_array().unwrap().len(), 3);
    service.send(Method::DELETE, first.header("location")).await.expect(204);
    let anew = post("/v1/forecasts", "k-1", body).await.expect(201);
    assert_ne!(anew.header("location"), first.header("location"), "a key goes with its run");
    for key in ["", "with space", &"x".repeat(256)] {
        let request = service.request(Method::POST, "/v1/forecasts").header(CONTENT_TYPE, "application/json");
        let answer =
            answered(request.header("idempotency-key", key).body("{}")).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), ["idempotency-key"]);
    }
}

/// Runs the same future several times at once.
async fn futures_join<F: Future>(times: usize, make: impl Fn() -> F) -> Vec<F::Output> {
    let mut pending: Vec<_> = (0..times).map(|_| Box::pin(make())).collect();
    let mut done: Vec<Option<F::Output>> = (0..times).map(|_| None).collect();
    std::future::poll_fn(|context| {
        for (future, slot) in pending.iter_mut().zip(&mut done) {
            if slot.is_none()
                && let std::task::Poll::Ready(output) = future.as_mut().poll(context)
            {
                *slot = Some(output);
            }
        }
        if done.iter().all(Option::is_some) { std::task::Poll::Ready(()) } else { std::task::Poll::Pending }
    })
    .await;
    done.into_iter().flatten().collect()
}

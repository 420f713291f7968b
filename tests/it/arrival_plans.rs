//! Arrival plans as planners write them: seasons, campaigns, ranges, tables; in a request, of a network, on the command line.

use serde_json::{Value, json};

use crate::harness::{Service, changed, forecast_body};
use crate::process::{command, run};

fn with(arrivals: Value) -> Value {
    changed(forecast_body(), "/arrivals", arrivals)
}

async fn forecast(service: &Service, arrivals: Value) -> Value {
    service.post("/v1/forecasts", &with(arrivals)).await.expect(201).json()
}

fn nodes(run: &Value, date: usize) -> f64 {
    run["forecast"][date]["nodes"]["expected"].as_f64().unwrap()
}

/// Both dates' tails: expectation and width of the 90 % interval.
fn tails(run: &Value) -> Vec<(f64, f64)> {
    let dates = run["forecast"].as_array().unwrap().iter();
    let rows = dates.flat_map(|at| at["tail"].as_array().unwrap());
    rows.map(|row| {
        let number = |value: &Value| value.as_f64().unwrap();
        let interval = &row["intervals"][1];
        (number(&row["expected"]), number(&interval["high"]) - number(&interval["low"]))
    })
    .collect()
}

#[tokio::test]
async fn seasons_and_campaigns_bring_their_arrivals() {
    let service = Service::start().await;
    let plain = forecast(&service, json!({"per_day": 50.0})).await;
    // June doubled, a pause of ten days in July, and three times as many in ISO week 33 of 2026, 10 to 16 August.
    let months = [1.0, 1.0, 1.0, 1.0, 1.0, 2.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0];
    let pause = json!([{"from": "2026-07-10", "until": "2026-07-20", "factor": 0}]);
    let seasonal = json!({"per_day": 50, "months": months, "weeks": {"33": 3}, "campaigns": pause});
    let seasonal = forecast(&service, seasonal).await;
    for (date, more) in [(0, 30.0 * 50.0), (1, 30.0 * 50.0 - 10.0 * 50.0 + 7.0 * 100.0)] {
        let found = nodes(&seasonal, date) - nodes(&plain, date);
        assert!((found - more).abs() < 1e-6, "{date}: {found} and {more}");
    }
    assert_ne!(seasonal["inputs_digest"], plain["inputs_digest"]);
    // What changes nothing is not another question.
    let even = forecast(&service, json!({"per_day": 50.0, "months": vec![1; 12], "relative_deviation": 0})).await;
    assert_eq!(even["inputs_digest"], plain["inputs_digest"]);
}

#[tokio::test]
async fn a_range_widens_the_intervals_and_is_part_of_the_digest() {
    let service = Service::start().await;
    let plain = forecast(&service, json!({"per_day": 50.0})).await;
    let vague = forecast(&service, json!({"per_day": 50.0, "range": [30, 80]})).await;
    assert_ne!(vague["inputs_digest"], plain["inputs_digest"]);
    for (i, (exact, wide)) in tails(&plain).into_iter().zip(tails(&vague)).enumerate() {
        assert_eq!(exact.0, wide.0);
        assert!(wide.1 > exact.1, "row {i}: {exact:?} and {wide:?}");
    }
    let caution = |run: &Value| run["cautions"].to_string();
    assert!(caution(&plain).contains("given without a range are taken as exact"));
}

#[tokio::test]
async fn a_table_is_segments() {
    let service = Service::start().await;
    let segments = json!([
        {"from": "2026-05-15", "per_day": 40},
        {"from": "2026-07-01", "per_day": 55.5, "growth_per_year": 0.2},
    ]);
    let by_segments = forecast(&service, json!({"segments": segments, "weeks": {"30": 2}})).await;
    let table = "\u{feff}per_day;from;growth_per_year\r\n40;2026-05-15;\r\n55.5;2026-07-01;0.2\r\n";
    let by_table = forecast(&service, json!({"csv": table, "weeks": {"30": 2}})).await;
    for part in ["inputs_digest", "forecast"] {
        assert_eq!(by_segments[part], by_table[part], "{part}");
    }
}

#[tokio::test]
async fn seasons_that_cut_too_finely_say_what_to_do() {
    let service = Service::start().await;
    let body = with(json!({"per_day": 50, "months": [1, 2, 1, 2, 1, 2, 1, 2, 1, 2, 1, 2]}));
    let far = changed(body, "/dates", json!(["2026-07-01", "2076-07-01"]));
    let answer = service.post("/v1/forecasts", &far).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/arrivals/months"]);
    assert!(answer.text.contains("nearer dates"), "{}", answer.text);
}

#[tokio::test]
async fn a_network_keeps_its_plan_as_it_was_given() {
    let service = Service::start().await;
    let network = "/v1/networks/heronsgate";
    let plan = |arrivals: &Value, ends_after: &str| {
        json!({"degree_kind": "received", "forecast_plan": {
            "thresholds": [10], "horizon": {"ends_after": ends_after, "every": "P1M"}, "arrivals": arrivals}})
    };
    let arrivals = json!({
        "per_day": 42.0, "growth_per_year": 0.2,
        "months": [1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.8, 2.2],
        "weeks": {"7": 1.5, "47": 3.0},
        "campaigns": [{"from": "2026-11-20", "until": "2026-12-01", "factor": 2.5}],
        "range": [35.0, 50.0],
    });
    service.put(network, &plan(&arrivals, "P6M")).await.expect(201);
    let kept = service.get(network).await.expect(200).json()["forecast_plan"]["arrivals"].clone();
    assert_eq!(kept, arrivals);
    service.put(network, &plan(&kept, "P6M")).await.expect(200);
    let counts = json!({"degree_counts": forecast_body()["snapshots"][0]["degree_counts"]});
    service.put(&format!("{network}/snapshots/2026-06-01"), &counts).await.expect(201);
    let by_plan = service.post(&format!("{network}/forecasts"), &json!({})).await.expect(201).json();
    let given = json!({"arrivals": arrivals, "thresholds": [10], "horizon": {"until": "2026-12-01", "every": "P1M"}});
    let by_request = service.post(&format!("{network}/forecasts"), &given).await.expect(201).json();
    assert_eq!(by_plan["inputs_digest"], by_request["inputs_digest"]);
    // A table is kept as segments.
    let table = json!({"csv": "from,per_day\n2026-06-01,40\n", "relative_deviation": 0.1});
    service.put(network, &plan(&table, "P6M")).await.expect(200);
    let kept = &service.get(network).await.expect(200).json()["forecast_plan"]["arrivals"];
    assert_eq!((&kept["segments"][0]["per_day"], &kept["relative_deviation"]), (&json!(40.0), &json!(0.1)));
    // Too many pieces show when the plan is stored, not at its first forecast.
    let months = json!({"per_day": 42, "months": [1, 2, 1, 2, 1, 2, 1, 2, 1, 2, 1, 2]});
    let answer = service.put(network, &plan(&months, "P60Y")).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/forecast_plan/arrivals/months"]);
}

#[test]
fn the_command_line_reads_a_table() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("body.json"), forecast_body().to_string()).unwrap();
    let forecast = |table: &str, more: &[&str]| {
        std::fs::write(folder.path().join("plan.csv"), table).unwrap();
        let mut command = command(folder.path());
        command.args(["forecast", "body.json", "--format", "json", "--arrivals-csv", "plan.csv"]).args(more);
        let output = run(command, "");
        let text = |bytes: Vec<u8>| String::from_utf8(bytes).unwrap();
        (output.status.code(), text(output.stdout), text(output.stderr))
    };
    let (code, answer, error) = forecast("from,per_day\n2026-06-01,40\n2026-07-01,80\n", &[]);
    assert_eq!(code, Some(0), "{error}");
    let answer: Value = serde_json::from_str(&answer).unwrap();
    // 30 days at 40, then 62 at 80.
    assert!((nodes(&answer, 1) - nodes(&answer, 0) - 62.0 * 80.0).abs() < 1e-6);
    let (code, _, error) = forecast("from,per_day\n2026-06-01,many\n", &[]);
    assert_eq!(code, Some(2));
    assert!(error.contains("/arrivals/csv: line 2: per_day is \"many\""), "{error}");
    assert_eq!(forecast("from,per_day\n", &["--arrivals", "5"]).0, Some(2), "one plan at a time");
    let mut missing = command(folder.path());
    missing.args(["forecast", "body.json", "--arrivals-csv", "nowhere.csv"]);
    let output = run(missing, "");
    assert_eq!(output.status.code(), Some(1));
    assert!(String::from_utf8(output.stderr).unwrap().contains("nowhere.csv"));
}

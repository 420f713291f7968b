//! Scenarios kept with a network, and their comparison on demand.

use reqwest::Method;
use serde_json::{Value, json};

use crate::harness::{COUNTS, Service, changed, json_text};
use crate::questions::patient;
use crate::tracking::{put_counts, settings, settled};

const NETWORK: &str = "/v1/networks/heronsgate";
const COMPARISON: &str = "/v1/networks/heronsgate/comparison";

fn path(name: &str) -> String {
    format!("{NETWORK}/scenarios/{name}")
}

/// A network with a plan, a snapshot, a limit and two scenarios.
pub async fn tracked() -> Service {
    let service = patient().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await.expect(201);
    let limit = json!({"threshold": 10, "max_nodes": 900, "by": "2026-08-15"});
    service.put(&format!("{NETWORK}/limits/fan-out"), &limit).await.expect(201);
    service.put(&path("campaign"), &json!({"arrivals_factor": 1.5})).await.expect(201);
    service.put(&path("uniform"), &json!({"preferential_share": 0})).await.expect(201);
    service
}

#[tokio::test]
async fn a_scenario_is_kept_as_it_was_given() {
    let service = Service::start().await;
    let body = json!({
        "arrivals": {"segments": [{"from": "2026-06-01", "per_day": 40}, {"from": "2026-09-01", "per_day": 60.5}]},
        "links_factor": 0.9, "departures_per_node_day": 0.0001, "degree_cap": {"links": 60, "refused": "lost"},
    });
    service.put(&path("plan"), &body).await.expect_problem(404, "not_found");
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let stored = service.put(&path("plan"), &body).await.expect(201);
    assert_eq!(stored.header("location"), path("plan"));
    let found = service.get(&path("plan")).await.expect(200);
    assert_eq!(found.json(), json!({"name": "plan", "change": body}));
    assert_eq!(found.header("etag"), stored.json()["etag"].as_str().unwrap());
    service.get_with(&path("plan"), "if-none-match", found.header("etag")).await.expect(304);
    service.get_with(&path("plan"), "if-modified-since", found.header("last-modified")).await.expect(304);
    let other = json_text(&json!({"links_factor": 2}));
    service.put_with(&path("plan"), other.clone(), &[("if-none-match", "*")]).await.expect(412);
    service.put_with(&path("plan"), other, &[("if-match", found.header("etag"))]).await.expect(200);
    service.delete_if(&path("plan"), found.header("etag")).await.expect(412);
    let items = service.get(&format!("{NETWORK}/scenarios")).await.expect(200).json();
    assert_eq!(items["items"][0]["change"], json!({"links_factor": 2}));
    service.send(Method::DELETE, &path("plan")).await.expect(204);
    service.get(&path("plan")).await.expect_problem(404, "not_found");
    for name in 0..10 {
        service.put(&path(&format!("s{name}")), &json!({"links_factor": 2})).await.expect(201);
    }
    service.put(&path("plan"), &json!({"links_factor": 2})).await.expect_problem(409, "network_full");
    service.put(&path("s3"), &json!({"links_factor": 3})).await.expect(200);
}

#[tokio::test]
async fn a_scenario_that_is_none_is_refused_with_the_place() {
    let service = Service::start().await;
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    for (body, place) in [
        (json!({}), ""),
        (json!({"arrivals_factor": -1}), "/arrivals_factor"),
        (json!({"arrivals_factor": 1, "arrivals": {"per_day": 1}}), ""),
        (json!({"arrivals": {"per_day": -1}}), "/arrivals/per_day"),
        (json!({"name": "plan", "links_factor": 1}), "/name"),
        (json!({"preferential_share": 2}), "/preferential_share"),
        (json!({"degree_cap": {"links": 5}}), "/degree_cap"),
    ] {
        let refused = service.put(&path("plan"), &body).await.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [place], "{body}");
    }
    let long = format!("{{\"links_factor\": 2{}}}", " ".repeat(70_000));
    let refused = service.put_with(&path("plan"), ("application/json", long), &[]).await;
    assert_eq!(refused.expect_problem(400, "invalid_request").places(), [""]);
}

#[tokio::test]
async fn scenarios_are_compared_by_the_plan_with_the_limits_under_each() {
    let service = tracked().await;
    let all = service.get(COMPARISON).await.expect(200);
    assert_eq!(all.header("cache-control"), "no-store");
    let all = all.json();
    assert_eq!((&all["network"], &all["as_of"]), (&json!("heronsgate"), &json!("2026-06-01")));
    let names = |answer: &Value| -> Vec<String> {
        let scenarios = answer["scenarios"].as_array().unwrap();
        scenarios.iter().map(|scenario| scenario["name"].as_str().unwrap().to_owned()).collect()
    };
    assert_eq!(names(&all), ["campaign", "uniform"]);
    assert_eq!(all["limits"][0]["name"], "fan-out");
    for scenario in all["scenarios"].as_array().unwrap() {
        assert_eq!(scenario["limits"][0]["name"], "fan-out");
        assert_eq!(scenario["dates"].as_array().unwrap().len(), 2);
        assert_eq!(scenario["dates"][0]["tail"].as_array().unwrap().len(), 3);
    }
    let more = &all["scenarios"][0]["dates"][1]["tail"][0];
    assert!(
        more["difference"]["expected"].as_f64().unwrap() > 0.0,
        "half as many arrivals again make more hubs: {more}"
    );
    let hubs = &all["scenarios"][1]["dates"][1]["tail"][2];
    assert!(
        hubs["difference"]["expected"].as_f64().unwrap() < 0.0,
        "no preferential links make fewer large hubs: {hubs}"
    );

    let one = service.get(&format!("{COMPARISON}?scenarios=uniform,campaign")).await.expect(200).json();
    assert_eq!(names(&one), ["uniform", "campaign"], "in the order asked");
    let one = service.get(&format!("{COMPARISON}?scenarios=uniform&thresholds=7&until=2026-12-01")).await.expect(200);
    let tail = &one.json()["scenarios"][0]["dates"][0];
    assert_eq!((&tail["date"], &tail["tail"][0]["threshold"]), (&json!("2026-12-01"), &json!(7)));
    let stepped = service.get(&format!("{COMPARISON}?until=2026-09-15&every=P1M")).await.expect(200).json();
    assert_eq!(stepped["forecast"].as_array().unwrap().len(), 3);
    let table = service.get(&format!("{COMPARISON}?format=csv")).await.expect(200);
    assert!(table.text.starts_with("scenario,date,threshold,"), "{}", table.text);
    assert_eq!(table.text.matches("\r\ncampaign,").count(), 6, "{}", table.text);
}

#[tokio::test]
async fn a_comparison_that_cannot_be_made_says_what_would_help() {
    let service = tracked().await;
    settled(&service).await;
    let missing =
        service.get(&format!("{COMPARISON}?scenarios=campaign,launch,ads")).await.expect_problem(404, "not_found");
    for name in ["launch", "ads"] {
        assert!(missing.text.contains(name), "{}", missing.text);
    }
    for (query, place) in [
        ("scenarios=campaign,campaign", "scenarios"),
        ("thresholds=3,x", "thresholds"),
        ("thresholds=0", "thresholds"),
        ("until=soon", "until"),
        ("until=2026-05-01", "until"),
        ("until=2026-06-02&every=P1M", "until"),
        ("every=P1M", "every"),
        ("until=2026-09-01&every=month", "every"),
        ("scenario=campaign", "scenario"),
        ("format=xml", "format"),
    ] {
        let refused = service.get(&format!("{COMPARISON}?{query}")).await.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [place], "{query}");
    }
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(200);
    let refused = service.get(COMPARISON).await.expect_problem(422, "no_plan");
    assert!(refused.text.contains("thresholds"), "{}", refused.text);
    // One snapshot shows no arrivals, and without a plan none are given.
    let query = format!("{COMPARISON}?thresholds=5&until=2026-09-01");
    service.get(&query).await.expect_problem(422, "arrivals_required");
    put_counts(&service, "2026-05-02", &COUNTS[0]).await.expect(201);
    service.get(&query).await.expect(200);
    for name in ["campaign", "uniform"] {
        service.send(Method::DELETE, &path(name)).await.expect(204);
    }
    service.get(&query).await.expect_problem(422, "no_scenario");
    let late = json!({"arrivals": {"segments": [{"from": "2026-07-01", "per_day": 40}]}});
    service.put(&path("late"), &late).await.expect(201);
    let refused = service.get(&query).await.expect_problem(422, "impossible");
    assert!(refused.text.contains("late"), "{}", refused.text);
    service.send(Method::DELETE, &format!("{NETWORK}/snapshots/2026-06-01")).await.expect(204);
    service.send(Method::DELETE, &format!("{NETWORK}/snapshots/2026-05-02")).await.expect(204);
    service.get(&query).await.expect_problem(422, "no_snapshot");
}

#[tokio::test]
async fn scenarios_take_on_no_refresh() {
    let service = tracked().await;
    settled(&service).await;
    let latest = service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).text;
    service.put(&path("campaign"), &changed(json!({}), "/links_factor", json!(2))).await.expect(200);
    service.send(Method::DELETE, &path("uniform")).await.expect(204);
    settled(&service).await;
    assert_eq!(service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).text, latest);
}

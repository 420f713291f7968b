//! Limits kept with a network: stored, answered by its refreshes, found again after a restart.

use reqwest::Method;
use serde_json::{Value, json};

use crate::harness::{Answer, COUNTS, Service, changed};
use crate::questions::patient;
use crate::tracking::{put_counts, settings, settled};

const NETWORK: &str = "/v1/networks/heronsgate";
const LIMIT: &str = "/v1/networks/heronsgate/limits/fan-out";

fn limit() -> Value {
    json!({"threshold": 10, "max_nodes": 900, "by": "2026-08-15", "risk": 0.1})
}

/// A network with a plan, a snapshot and a limit.
async fn tracked() -> Service {
    let service = patient().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await.expect(201);
    let put = service.put(LIMIT, &limit()).await.expect(201);
    assert_eq!(put.header("location"), LIMIT);
    service
}

async fn read(service: &Service) -> Answer {
    settled(service).await;
    service.get(LIMIT).await.expect(200)
}

#[tokio::test]
async fn a_kept_limit_is_answered_by_the_refresh_that_follows_it() {
    let service = tracked().await;
    let first = read(&service).await;
    let kept = first.json();
    assert_eq!(kept["state"], "current", "{kept}");
    for (field, value) in limit().as_object().unwrap() {
        assert_eq!((&kept[field], &kept["answer"][field]), (value, value), "{field}");
    }
    assert_eq!(kept["answer"]["name"], "fan-out");
    let latest = service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).json();
    assert_eq!((&kept["forecast"], &kept["answer"]), (&latest["id"], &latest["limits"][0]));
    let line = &service.get(&format!("{NETWORK}/limits")).await.expect(200).json()["items"][0];
    assert_eq!((&line["state"], &line["verdict"]), (&json!("current"), &kept["answer"]["verdict"]));

    // Another threshold: the old answer is none to it.
    service.put(LIMIT, &changed(limit(), "/threshold", json!(20))).await.expect(200);
    let second = read(&service).await;
    assert_eq!((&second.json()["state"], &second.json()["answer"]["threshold"]), (&json!("current"), &json!(20)));
    assert_ne!(second.header("etag"), first.header("etag"));

    service.send(Method::DELETE, LIMIT).await.expect(204);
    settled(&service).await;
    service.get(LIMIT).await.expect_problem(404, "not_found");
    let latest = service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).json();
    assert_eq!(latest["limits"], json!([]));
}

#[tokio::test]
async fn a_limit_is_polled_and_changed_under_conditions() {
    let service = tracked().await;
    let found = read(&service).await;
    let tag = found.header("etag").to_owned();
    assert!(!found.header("last-modified").is_empty());
    let again = service.get_with(LIMIT, "if-none-match", &tag).await.expect(304);
    assert_eq!((again.text.as_str(), again.header("etag")), ("", tag.as_str()));
    // Another forecast of the same limit: another answer, which the tag does not name; the limit is still the one it names.
    put_counts(&service, "2026-05-02", &COUNTS[0]).await.expect(201);
    let newer = settled(&service).await;
    assert_eq!(newer["refresh"]["state"], "current", "{newer}");
    assert_ne!(service.get_with(LIMIT, "if-none-match", &tag).await.expect(200).header("etag"), tag);
    let body = changed(limit(), "/max_nodes", json!(901));
    let put = async |headers: &[(&str, &str)]| service.put_with(LIMIT, crate::harness::json_text(&body), headers).await;
    put(&[("if-none-match", "*")]).await.expect_problem(412, "precondition_failed");
    let stored = put(&[("if-match", &tag)]).await.expect(200).json();
    put(&[("if-match", &tag)]).await.expect_problem(412, "precondition_failed");
    put(&[("if-match", stored["etag"].as_str().unwrap())]).await.expect(200);
    service.delete_if(LIMIT, &tag).await.expect_problem(412, "precondition_failed");
}

#[tokio::test]
async fn storing_the_same_limit_again_changes_nothing() {
    let service = tracked().await;
    settled(&service).await;
    let before = service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200);
    let stored = service.get(&format!("{NETWORK}/limits")).await.expect(200).json();
    service.put(LIMIT, &changed(limit(), "/by", json!("2026-08-15T00:00:00Z"))).await.expect(200);
    settled(&service).await;
    assert_eq!(service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).text, before.text);
    assert_eq!(service.get(&format!("{NETWORK}/limits")).await.expect(200).json(), stored);
}

#[tokio::test]
async fn a_limit_says_why_it_has_no_answer() {
    let service = Service::start().await;
    service.put(LIMIT, &limit()).await.expect_problem(404, "not_found");
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    service.put(LIMIT, &limit()).await.expect(201);
    let state = async || service.get(LIMIT).await.expect(200).json();
    let none = state().await;
    assert_eq!((&none["state"], &none["answer"], &none["forecast"]), (&json!("no_plan"), &json!(null), &json!(null)));
    assert!(none["detail"].as_str().unwrap().contains("forecast_plan"), "{none}");
    service.put(NETWORK, &settings()).await.expect(200);
    settled(&service).await;
    let waiting = state().await;
    assert_eq!((&waiting["state"], &waiting["answer"]), (&json!("waiting"), &json!(null)), "{waiting}");
    put_counts(&service, "2026-09-01", &COUNTS[1]).await.expect(201);
    settled(&service).await;
    let passed = state().await;
    assert_eq!((&passed["state"], &passed["answer"]), (&json!("date_passed"), &json!(null)));
    assert!(passed["detail"].as_str().unwrap().contains("2026-09-01"), "{passed}");
    // It is left out of the forecast, which is made all the same.
    let latest = service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200);
    assert_eq!((latest.header("forecast-state"), &latest.json()["limits"]), ("current", &json!([])));
    service.put(LIMIT, &changed(limit(), "/by", json!("2927-01-01"))).await.expect(200);
    settled(&service).await;
    assert_eq!(state().await["state"], "out_of_reach");
    assert_eq!(
        service.get(&format!("{NETWORK}/forecasts/latest")).await.expect(200).header("forecast-state"),
        "current"
    );
}

#[tokio::test]
async fn a_forecast_of_the_network_asks_its_limits_unless_it_brings_its_own() {
    let service = tracked().await;
    let path = format!("{NETWORK}/forecasts");
    let kept = service.post(&path, &json!({})).await.expect(201).json();
    assert_eq!(kept["limits"][0]["name"], "fan-out");
    let own = json!({"limits": [{"threshold": 5, "max_nodes": 1, "by": "2026-08-01"}]});
    let own = service.post(&path, &own).await.expect(201).json();
    assert_eq!((own["limits"].as_array().unwrap().len(), &own["limits"][0]["name"]), (1, &json!(null)));
    let none = service.post(&path, &json!({"limits": []})).await.expect(201).json();
    assert_eq!(none["limits"], json!([]));
}

#[tokio::test]
async fn a_limit_that_is_none_is_refused_with_the_place() {
    let service = Service::start().await;
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    for (pointer, value, place) in [
        ("/threshold", json!(0), "/threshold"),
        ("/threshold", json!(null), ""),
        ("/max_nodes", json!("many"), "/max_nodes"),
        ("/by", json!("2026-02-30"), "/by"),
        ("/risk", json!(1.0), "/risk"),
        ("/name", json!("other"), "/name"),
    ] {
        let refused = service.put(LIMIT, &changed(limit(), pointer, value)).await;
        assert_eq!(refused.expect_problem(400, "invalid_request").places(), [place], "{pointer}");
    }
    let refused =
        service.put(&format!("{NETWORK}/limits/a%20b"), &limit()).await.expect_problem(400, "invalid_request");
    assert_eq!(refused.places(), ["limit"]);
    assert!(refused.text.contains("a limit's name is"), "{}", refused.text);
    for name in 0..50 {
        service.put(&format!("{NETWORK}/limits/l{name:02}"), &limit()).await.expect(201);
    }
    service.put(LIMIT, &limit()).await.expect_problem(409, "network_full");
    let page = service.get(&format!("{NETWORK}/limits?limit=20")).await.expect(200);
    assert_eq!(page.json()["items"].as_array().unwrap().len(), 20);
    assert!(page.header("link").contains("cursor=l19"), "{}", page.header("link"));
}

#[tokio::test]
async fn what_is_kept_outlives_the_process_and_goes_with_its_network() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("kept.db").display());
    let start = async || Service::start_with(|config| config.database.url = url.clone()).await;
    let service = start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await.expect(201);
    service.put(LIMIT, &limit()).await.expect(201);
    let scenario = format!("{NETWORK}/scenarios/campaign");
    service.put(&scenario, &json!({"arrivals_factor": 1.2})).await.expect(201);
    // Whether or not the refresh has ended.
    service.stop().await;
    let service = start().await;
    while read(&service).await.json()["state"] != "current" {
        tokio::time::sleep(std::time::Duration::from_millis(20)).await;
    }
    assert_eq!(service.get(&scenario).await.expect(200).json()["change"], json!({"arrivals_factor": 1.2}));
    service.send(Method::DELETE, NETWORK).await.expect(204);
    service.put(NETWORK, &settings()).await.expect(201);
    for list in ["limits", "scenarios"] {
        assert_eq!(service.get(&format!("{NETWORK}/{list}")).await.expect(200).json()["items"], json!([]), "{list}");
    }
    service.stop().await;
}

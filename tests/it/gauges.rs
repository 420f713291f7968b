//! Latest forecasts and limits among the metrics, read by a strict reader of the text format
//! (https://prometheus.io/docs/instrumenting/exposition_formats/, version 0.0.4).

use std::collections::{BTreeMap, BTreeSet};
use std::time::Duration;

use jiff::Timestamp;
use jiff::tz::TimeZone;
use reqwest::Method;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};

use crate::harness::{COUNTS, Service, changed, pairs};
use crate::tracking::settings;

/// Samples by name and labels.
type Samples = BTreeMap<(String, BTreeMap<String, String>), f64>;

/// Reads an exposition, and fails on whatever the format does not allow.
fn read(text: &str) -> Samples {
    assert!(text.ends_with('\n'), "the last line ends");
    let (mut samples, mut typed, mut ended) = (Samples::new(), BTreeMap::new(), BTreeSet::new());
    let mut family = String::new();
    for line in text.lines().filter(|line| !line.trim().is_empty()) {
        if let Some(comment) = line.strip_prefix("# ") {
            let (keyword, rest) = comment.split_once(' ').unwrap();
            let (name, rest) = rest.split_once(' ').unwrap();
            check_name(name);
            if name != family {
                assert!(ended.insert(std::mem::replace(&mut family, name.to_owned())), "{name} stands together");
                assert!(!ended.contains(name), "{name} stands together");
            }
            match keyword {
                "HELP" => assert!(!rest.is_empty(), "{line}"),
                "TYPE" => {
                    assert!(["counter", "gauge", "histogram", "summary"].contains(&rest), "{line}");
                    assert!(typed.insert(name.to_owned(), rest.to_owned()).is_none(), "one TYPE: {line}");
                }
                _ => panic!("{line}"),
            }
            continue;
        }
        let (name, labels, value) = sample(line);
        let base = ["_bucket", "_sum", "_count"].iter().find_map(|end| name.strip_suffix(end));
        let base = base.filter(|base| typed.get(*base).is_some_and(|kind| kind == "histogram" || kind == "summary"));
        assert_eq!(base.unwrap_or(&name), family, "a sample stands under its TYPE: {line}");
        assert!(samples.insert((name, labels), value).is_none(), "one sample a name and labels: {line}");
    }
    samples
}

fn sample(line: &str) -> (String, BTreeMap<String, String>, f64) {
    let end = line.find(['{', ' ']).unwrap();
    let (name, mut rest) = line.split_at(end);
    check_name(name);
    let mut labels = BTreeMap::new();
    if let Some(inside) = rest.strip_prefix('{') {
        rest = inside;
        while !rest.starts_with('}') {
            let (label, after) = rest.split_once("=\"").unwrap();
            check_name(label);
            let mut value = String::new();
            let mut characters = after.chars();
            loop {
                match characters.next().expect("a label's value ends") {
                    '"' => break,
                    '\\' => value.push(match characters.next() {
                        Some('n') => '\n',
                        Some(escaped @ ('\\' | '"')) => escaped,
                        other => panic!("{other:?} is no escape: {line}"),
                    }),
                    plain => value.push(plain),
                }
            }
            assert!(labels.insert(label.to_owned(), value).is_none(), "a label once: {line}");
            rest = characters.as_str();
            rest = rest.strip_prefix(',').unwrap_or(rest);
        }
        rest = &rest[1..];
    }
    let value = rest.strip_prefix(' ').unwrap();
    assert!(!value.contains(' '), "no time stamps: {line}");
    (name.to_owned(), labels, value.parse().unwrap())
}

fn check_name(name: &str) {
    let plain = |c: char| c.is_ascii_alphanumeric() || c == '_' || c == ':';
    assert!(name.chars().all(plain) && !name.starts_with(|c: char| c.is_ascii_digit()) && !name.is_empty(), "{name}");
}

async fn scrape(service: &Service) -> Samples {
    read(&service.get("/metrics").await.expect(200).text)
}

fn told(samples: &Samples, name: &str, labels: &[(&str, &str)]) -> Option<f64> {
    let labels = labels.iter().map(|&(name, value)| (name.to_owned(), value.to_owned())).collect();
    samples.get(&(name.to_owned(), labels)).copied()
}

/// A network with a forecast from `as_of`, and its forecast.
async fn network(service: &Service, name: &str, as_of: &str) -> Value {
    let path = format!("/v1/networks/{name}");
    service.put(&path, &settings()).await.expect(201);
    let counts = json!({"degree_counts": pairs(&COUNTS[1])});
    service.put(&format!("{path}/snapshots/{as_of}"), &counts).await.expect(201);
    current(service, name).await
}

async fn current(service: &Service, name: &str) -> Value {
    for _ in 0..2000 {
        let latest = service.get(&format!("/v1/networks/{name}/forecasts/latest")).await;
        if latest.header("forecast-state") == "current" {
            return latest.json();
        }
        tokio::time::sleep(Duration::from_millis(30)).await;
    }
    panic!("{name} has no forecast");
}

fn today() -> String {
    Timestamp::now().to_zoned(TimeZone::UTC).date().to_string()
}

#[tokio::test]
async fn a_scrape_tells_the_latest_forecast_and_its_limits() {
    let service = Service::start().await;
    let before = scrape(&service).await;
    assert_eq!(told(&before, "tailcast_forecast_gauges_up", &[]), Some(1.0));
    network(&service, "heronsgate", &today()).await;
    let in_a_year = Timestamp::now().to_zoned(TimeZone::UTC).date().saturating_add(jiff::Span::new().days(300));
    let limit = json!({"threshold": 10, "max_nodes": 900, "by": in_a_year.to_string(), "risk": 0.1});
    service.put("/v1/networks/heronsgate/limits/fan-out", &limit).await.expect(201);
    let latest = current(&service, "heronsgate").await;
    let samples = scrape(&service).await;
    let network = ("network", "heronsgate");
    for (state, value) in [("current", 1.0), ("refreshing", 0.0), ("outdated", 0.0)] {
        assert_eq!(told(&samples, "tailcast_forecast_state", &[network, ("state", state)]), Some(value));
    }
    for (date, at) in [("next", &latest["forecast"][0]), ("last", &latest["forecast"][1])] {
        let time: Timestamp = format!("{}T00:00:00Z", at["date"].as_str().unwrap()).parse().unwrap();
        let name = "tailcast_forecast_date_timestamp_seconds";
        assert_eq!(told(&samples, name, &[network, ("date", date)]), Some(time.as_second() as f64));
        for tail in at["tail"].as_array().unwrap() {
            let threshold = tail["threshold"].to_string();
            let labels = [network, ("threshold", threshold.as_str()), ("date", date)];
            let told = |name, labels: &[_]| told(&samples, name, labels);
            assert_eq!(told("tailcast_forecast_hubs", &labels), tail["expected"].as_f64());
            assert_eq!(told("tailcast_hubs", &labels[..2]), tail["now"].as_f64());
            let wide = [labels.as_slice(), &[("level", "0.9")]].concat();
            let interval = &tail["intervals"][1];
            assert_eq!(interval["level"], 0.9);
            assert_eq!(told("tailcast_forecast_hubs_low", &wide), interval["low"].as_f64());
            assert_eq!(told("tailcast_forecast_hubs_high", &wide), interval["high"].as_f64());
        }
    }
    let (answer, of_limit) = (&latest["limits"][0], [network, ("limit", "fan-out")]);
    assert_eq!(told(&samples, "tailcast_limit_risk", &of_limit), answer["at_by"]["crossed"].as_f64());
    assert_eq!(told(&samples, "tailcast_limit_risk_allowed", &of_limit), Some(0.1));
    assert_eq!(told(&samples, "tailcast_limit_headroom_nodes", &of_limit), answer["headroom"].as_f64());
    let made: Timestamp = latest["created_at"].as_str().unwrap().parse().unwrap();
    let told_made = told(&samples, "tailcast_forecast_made_timestamp_seconds", &[network]).unwrap();
    assert!((told_made - made.as_millisecond() as f64 / 1000.0).abs() < 0.002);
    service.send(Method::DELETE, "/v1/networks/heronsgate").await.expect(204);
    let after = scrape(&service).await;
    let left = after.keys().filter(|(_, labels)| labels.contains_key("network")).count();
    assert_eq!(left, 0, "a deleted network is told no more");
}

#[tokio::test]
async fn dates_that_have_passed_are_not_the_next() {
    let service = Service::start().await;
    network(&service, "heronsgate", "2024-01-01").await;
    let samples = scrape(&service).await;
    let dates: Vec<&str> = samples
        .keys()
        .filter(|(name, _)| name == "tailcast_forecast_date_timestamp_seconds")
        .map(|(_, labels)| labels["date"].as_str())
        .collect();
    assert_eq!(dates, ["last"]);
    assert!(!samples.keys().any(|(_, labels)| labels.get("date").is_some_and(|date| date == "next")));
}

#[tokio::test]
async fn what_is_told_is_bounded_and_what_is_left_out_counted() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("many.db").display());
    let service = Service::start_with(|config| {
        config.database.url = url.clone();
        config.metrics.networks = 1;
        config.metrics.thresholds = 2;
        config.metrics.limits = 1;
    })
    .await;
    for name in ["heronsgate", "ashford"] {
        network(&service, name, &today()).await;
    }
    let in_a_year = Timestamp::now().to_zoned(TimeZone::UTC).date().saturating_add(jiff::Span::new().days(300));
    for (name, nodes) in [("b", 900), ("a", 800)] {
        let limit = json!({"threshold": 10, "max_nodes": nodes, "by": in_a_year.to_string()});
        service.put(&format!("/v1/networks/ashford/limits/{name}"), &limit).await.expect(201);
        current(&service, "ashford").await;
    }
    let left_out = |samples: &Samples, kind| told(samples, "tailcast_forecast_left_out", &[("kind", kind)]);
    let samples = scrape(&service).await;
    assert_eq!(["networks", "thresholds", "limits"].map(|kind| left_out(&samples, kind)), [Some(1.0); 3]);
    let values = |label: &str| -> BTreeSet<String> {
        samples.keys().filter_map(|(_, labels)| labels.get(label).cloned()).collect()
    };
    assert_eq!(values("network"), BTreeSet::from(["ashford".to_owned()]));
    assert_eq!(values("threshold"), BTreeSet::from(["10".to_owned(), "5".to_owned()]), "the lowest");
    assert_eq!(values("limit"), BTreeSet::from(["a".to_owned()]));
    // Many networks with the same forecast, put there by hand.
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    for statement in [
        "WITH RECURSIVE n (i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM n WHERE i < 10000) INSERT INTO networks (name, \
         degree_kind, tag, created_at, updated_at) SELECT 'x' || i, 'received', (SELECT tag FROM networks LIMIT 1), 1, 1 FROM n",
        "INSERT INTO runs (id, kind, network, created_at, engine, seed, inputs_digest, tag, document, inputs) SELECT \
         substr(x.name || r.id, 1, 36), r.kind, x.name, r.created_at, r.engine, r.seed, r.inputs_digest, r.tag, '{}', '{}' \
         FROM networks x, (SELECT * FROM runs LIMIT 1) r WHERE x.name LIKE 'x%'",
        "INSERT INTO latest_forecasts (network, run_id, state, job, created_at, tag, document) SELECT network, id, 'current', \
         '', created_at, tag, document FROM runs WHERE network LIKE 'x%'",
    ] {
        sqlx::query(statement).execute(&mut other).await.unwrap();
    }
    let begun = std::time::Instant::now();
    let many = scrape(&service).await;
    assert_eq!(left_out(&many, "networks"), Some(10_001.0));
    assert!(begun.elapsed() < Duration::from_secs(2), "{:?}", begun.elapsed());
}

#[tokio::test]
async fn the_widest_level_is_told_and_a_lost_database_leaves_the_rest() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("gone.db");
    let service = Service::start_with(|config| config.database.url = format!("sqlite://{}", path.display())).await;
    let one_level = changed(settings(), "/forecast_plan/levels", json!([0.8]));
    service.put("/v1/networks/heronsgate", &one_level).await.expect(201);
    let counts = json!({"degree_counts": pairs(&COUNTS[1])});
    service.put(&format!("/v1/networks/heronsgate/snapshots/{}", today()), &counts).await.expect(201);
    current(&service, "heronsgate").await;
    let levels: BTreeSet<String> =
        scrape(&service).await.keys().filter_map(|(_, labels)| labels.get("level").cloned()).collect();
    assert_eq!(levels, BTreeSet::from(["0.8".to_owned()]));
    std::fs::rename(&path, folder.path().join("aside.db")).unwrap();
    let samples = scrape(&service).await;
    assert_eq!(told(&samples, "tailcast_forecast_gauges_up", &[]), Some(0.0));
    assert!(!samples.keys().any(|(_, labels)| labels.contains_key("network")));
    assert!(samples.keys().any(|(name, _)| name == "tailcast_http_requests_total"));
}

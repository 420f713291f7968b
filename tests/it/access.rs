//! Who may ask for what: every operation of the document with every kind of key.

use std::collections::BTreeSet;
use std::time::{Duration, Instant};

use jiff::{SignedDuration, Timestamp};
use reqwest::Method;
use serde_json::{Value, json};
use tailcast::api::ACCESS_RULES;
use tailcast::config::{DatabaseConfig, KeysNeeded};
use tailcast::service::{KeyCabinet, KeyScope, KeyTerms};

use crate::coverage::{CALLS, address, body};
use crate::harness::{Answer, DOCUMENT, Service, answered, csv, forecast_body, json_text};
use crate::notices::sends;
use crate::sources::{NOBODY, counts_in};

/// A service that asks for keys, and where its keys are.
pub struct Keyed {
    pub service: Service,
    pub database: DatabaseConfig,
}

/// Terms of a key without limits.
pub fn terms(name: &str, scope: KeyScope, networks: &[&str]) -> KeyTerms {
    KeyTerms {
        name: name.to_owned(),
        scope,
        networks: networks.iter().map(|&name| name.to_owned()).collect(),
        per_minute: None,
        per_day: None,
        expires_at: None,
    }
}

impl Keyed {
    pub async fn start() -> Self {
        let mut database = None;
        let service = Service::start_with(|config| {
            sends(config, &["https://hooks.example.org"]);
            counts_in(config, NOBODY);
            config.access.keys = KeysNeeded::Required;
            database = Some(config.database.clone());
        })
        .await;
        Self { service, database: database.unwrap() }
    }

    /// Makes a key as the command does: over another connection to the database.
    pub async fn key(&self, terms: KeyTerms) -> String {
        let cabinet = KeyCabinet::open(&self.database).await.unwrap();
        let (credential, _) = cabinet.create(terms).await.unwrap();
        cabinet.close().await;
        credential.reveal()
    }

    pub async fn revoke(&self, name: &str) {
        let cabinet = KeyCabinet::open(&self.database).await.unwrap();
        cabinet.revoke(name).await.unwrap();
        cabinet.close().await;
    }

    pub async fn send(&self, key: &str, method: &str, path: &str, body: Option<(&str, String)>) -> Answer {
        let mut request = self.service.request(method.to_uppercase().parse().unwrap(), path);
        if !key.is_empty() {
            request = request.bearer_auth(key);
        }
        if path.ends_with("/events") {
            // A stream has no end to wait for.
            request = request.header("accept", "text/csv");
        }
        if let Some((kind, body)) = body {
            request = request.header("content-type", kind).body(body);
        }
        answered(request).await
    }

    pub async fn get(&self, key: &str, path: &str) -> Answer {
        self.send(key, "get", path, None).await
    }

    pub async fn put(&self, key: &str, path: &str, body: &Value) -> Answer {
        self.send(key, "put", path, Some(json_text(body))).await
    }
}

#[test]
fn every_operation_has_a_rule() {
    let mut documented = BTreeSet::new();
    for (path, item) in DOCUMENT["paths"].as_object().unwrap() {
        documented.extend(item.as_object().unwrap().keys().map(|method| (method.to_uppercase(), path.clone())));
    }
    let ruled: BTreeSet<_> = ACCESS_RULES.iter().map(|rule| (rule.method.to_owned(), rule.path.to_owned())).collect();
    assert_eq!(ruled, documented);
    assert_eq!(ruled.len(), ACCESS_RULES.len(), "one rule each");
}

/// The document says of each operation what its rule asks.
#[test]
fn the_document_tells_the_rules() {
    assert_eq!(DOCUMENT["components"]["securitySchemes"]["access_key"]["scheme"], "bearer");
    for rule in ACCESS_RULES {
        let operation = &DOCUMENT["paths"][rule.path][rule.method.to_lowercase()];
        let security = &operation["security"][0]["access_key"];
        match rule.scope() {
            None => assert!(security.is_null() && operation["responses"]["401"].is_null(), "{rule:?}"),
            Some(scope) => {
                assert_eq!(*security, json!([scope.as_str()]), "{rule:?}");
                for status in ["401", "403", "429"] {
                    assert!(operation["responses"][status].is_object(), "{rule:?} {status}");
                }
            }
        }
    }
}

/// DEVELOPERS.md has the rules as a table: a row a scope and reach, a path with its methods.
#[test]
fn the_access_table_is_the_rules() {
    type Operations = Vec<(String, Vec<&'static str>)>;
    let mut rows: Vec<(String, Operations)> = Vec::new();
    for rule in ACCESS_RULES {
        let row = format!("| {} | {} |", rule.scope().map_or("none", KeyScope::as_str), rule.reach());
        let at = rows.iter().position(|(known, _)| *known == row).unwrap_or_else(|| {
            rows.push((row, Vec::new()));
            rows.len() - 1
        });
        let path = rule.path.replace("/v1/networks/{name}", "…");
        match rows[at].1.iter_mut().find(|(known, _)| *known == path) {
            Some((_, methods)) => methods.push(rule.method),
            None => rows[at].1.push((path, vec![rule.method])),
        }
    }
    let text = include_str!("../../DEVELOPERS.md");
    for (row, operations) in rows {
        let told: Vec<String> =
            operations.iter().map(|(path, methods)| format!("`{} {path}`", methods.join(" "))).collect();
        let line = format!("{row} {} |", told.join(", "));
        assert!(text.contains(&line), "the access table lacks the row\n{line}");
    }
}

/// Where no keys are asked for, a page that a browser shows can neither reach the service by a name of its own nor write.
#[tokio::test]
async fn without_keys_pages_of_other_origins_are_turned_away() {
    let service = Service::start().await;
    let send = async |method: Method, path: &str, header: &str, value: &str| {
        answered(service.request(method, path).header(header, value)).await
    };
    for path in ["/v1/networks", "/v1/networks/heronsgate/forecasts/latest", "/metrics"] {
        send(Method::GET, path, "host", "evil.example").await.expect_problem(403, "host_not_allowed");
    }
    for (method, path) in [(Method::POST, "/v1/networks/a/source/runs"), (Method::DELETE, "/v1/networks/a")] {
        send(method.clone(), path, "origin", "https://evil.example").await.expect_problem(403, "origin_not_allowed");
        let own = format!("http://{}", service.address());
        send(method, path, "origin", &own).await.expect_problem(404, "not_found");
    }
    send(Method::GET, "/livez", "host", "evil.example").await.expect(200);
}

/// What a key that is bound to other networks is answered, by the rule.
fn beyond(rule: &str) -> &'static [(u16, &'static str)] {
    match rule {
        "its network" => &[(403, "network_not_allowed")],
        "what belongs to its networks" => &[(404, "not_found")],
        "not for bound keys" => &[(403, "beyond_networks")],
        _ => &[],
    }
}

#[tokio::test]
async fn every_operation_is_held_against_its_rule() {
    let world = Keyed::start().await;
    let [read, write, admin] = [KeyScope::Read, KeyScope::Write, KeyScope::Admin]
        .map(|scope| terms(&format!("all-{}", scope.as_str()), scope, &[]));
    let (read, write, admin) = (world.key(read).await, world.key(write).await, world.key(admin).await);
    let own = world.key(terms("own", KeyScope::Write, &["heronsgate"])).await;
    let other = world.key(terms("other", KeyScope::Write, &["thornbury", "wexcombe"])).await;
    let revoked = world.key(terms("revoked", KeyScope::Admin, &[])).await;
    world.revoke("revoked").await;
    let ends_soon = Timestamp::now() + SignedDuration::from_millis(100);
    let expired = world.key(KeyTerms { expires_at: Some(ends_soon), ..terms("expired", KeyScope::Admin, &[]) }).await;
    tokio::time::sleep(Duration::from_millis(150)).await;
    // A key of this service but for its last digit.
    let last = if admin.ends_with('0') { "1" } else { "0" };
    let forged = format!("{}{last}", &admin[..admin.len() - 1]);

    let mut made = String::new();
    for (method, path, status) in CALLS {
        let rule = ACCESS_RULES.iter().find(|rule| rule.path == path && rule.method == method.to_uppercase()).unwrap();
        let address = address(path, &made);
        let send = |key: String| {
            let (world, address) = (&world, &address);
            async move { world.send(&key, method, address, body(method, path)).await }
        };
        let context = format!("{method} {path}");
        let right = match rule.scope() {
            None => {
                send(forged.clone()).await.expect(status);
                send(String::new()).await.expect(status);
                continue;
            }
            Some(KeyScope::Read) => &read,
            Some(KeyScope::Write) => &write,
            Some(KeyScope::Admin) => &admin,
        };
        for (key, code) in [
            (String::new(), "key_required"),
            ("tailcast_".to_owned(), "key_unknown"),
            (forged.clone(), "key_unknown"),
            (revoked.clone(), "key_revoked"),
            (expired.clone(), "key_expired"),
        ] {
            let refused = send(key).await.expect_problem(401, code);
            assert!(refused.header("www-authenticate").starts_with("Bearer realm=\"tailcast\""), "{context}");
        }
        let narrower: &[&String] = match rule.scope() {
            Some(KeyScope::Write) => &[&read],
            Some(KeyScope::Admin) => &[&read, &write],
            _ => &[],
        };
        for &key in narrower {
            let refused = send(key.clone()).await.expect_problem(403, "scope_too_narrow");
            let scope = format!("scope=\"{}\"", rule.scope().unwrap().as_str());
            assert!(refused.header("www-authenticate").contains(&scope), "{context}: {refused:?}");
        }
        if rule.scope() != Some(KeyScope::Admin) {
            match beyond(rule.reach()) {
                [] => assert_eq!(send(other.clone()).await.expect(200).json()["items"], json!([]), "{context}"),
                refusals => {
                    for &(status, code) in refusals {
                        send(other.clone()).await.expect_problem(status, code);
                    }
                }
            }
            // What the key is bound to it opens; a run of inline counts belongs to no network.
            if rule.method == "GET" && ["its network", "lists what belongs to its networks"].contains(&rule.reach()) {
                send(own.clone()).await.expect(status);
            }
        }
        let answer = send(right.clone()).await.expect(status);
        if status == 201 && method == "post" || path.ends_with("/links") {
            made = answer.json()["id"].as_str().unwrap().to_owned();
        }
    }
}

/// Things with ids of their own belong to networks, and lists are whole pages of what a key may know.
#[tokio::test]
async fn a_bound_key_sees_its_networks_alone() {
    let world = Keyed::start().await;
    let all = world.key(terms("all", KeyScope::Write, &[])).await;
    let own = world.key(terms("own", KeyScope::Write, &["thornbury", "wexcombe", "not-made-yet"])).await;
    let mut ids = Vec::new();
    for network in ["ashford", "heronsgate", "thornbury", "wexcombe", "zeal"] {
        let path = format!("/v1/networks/{network}");
        world.put(&all, &path, &json!({"degree_kind": "received"})).await.expect(201);
        let counts = json!({"degree_counts": [[0, 48], [1, 30], [2, 17], [5, 5]]});
        world.put(&all, &format!("{path}/snapshots/2026-06-01"), &counts).await.expect(201);
        let asked = json!({"arrivals": {"per_day": 1}, "thresholds": [3], "dates": ["2027-01-01"], "fixed": {"preferential_share": 0.5}});
        let run =
            world.send(&all, "post", &format!("{path}/forecasts"), Some(json_text(&asked))).await.expect(201).json();
        let asked = json!({"fixed": {"preferential_share": 0.5}});
        let fit = world.send(&all, "post", &format!("{path}/fits"), Some(json_text(&asked))).await.expect(201).json();
        let list = csv("time,source,target\n2020-01-01,ana,ben\n2020-01-02,cai,ben\n");
        let job = world.send(&all, "put", &format!("{path}/links"), Some(list)).await.expect(200).json();
        let id = |answer: &Value| answer["id"].as_str().unwrap().to_owned();
        ids.push((network, [("jobs", id(&job)), ("forecasts", id(&run)), ("fits", id(&fit))]));
    }
    for list in ["/v1/networks", "/v1/jobs", "/v1/forecasts", "/v1/fits"] {
        let mut seen = Vec::new();
        let mut next = format!("{list}?limit=1");
        loop {
            let page = world.get(&own, &next).await.expect(200);
            let items = page.json()["items"].as_array().unwrap().clone();
            assert_eq!(items.len(), 1, "{list}: pages are whole");
            let name = if list == "/v1/networks" { "name" } else { "network" };
            seen.extend(items.iter().map(|item| item[name].as_str().unwrap().to_owned()));
            match page.header("link").strip_prefix('<').and_then(|link| link.split('>').next()) {
                Some(more) => next = more.to_owned(),
                None => break,
            }
        }
        seen.sort();
        assert_eq!(seen, ["thornbury", "wexcombe"], "{list}");
        assert_eq!(world.get(&all, list).await.json()["items"].as_array().unwrap().len(), 5, "{list}");
    }
    for query in ["/v1/jobs?network=zeal", "/v1/forecasts?network=zeal", "/v1/fits?network=zeal"] {
        assert_eq!(world.get(&own, query).await.expect(200).json()["items"], json!([]), "{query}");
    }
    for (network, things) in &ids {
        for (kind, id) in things {
            let path = format!("/v1/{kind}/{id}");
            if ["thornbury", "wexcombe"].contains(network) {
                world.get(&own, &path).await.expect(200);
                continue;
            }
            let hidden = world.get(&own, &path).await.expect_problem(404, "not_found");
            let absent = world.get(&own, &format!("/v1/{kind}/00000000-0000-7000-8000-000000000000")).await;
            assert_eq!(hidden.json()["detail"], absent.json()["detail"], "nothing tells it from one that is not there");
            world.send(&own, "delete", &path, None).await.expect_problem(404, "not_found");
            world.get(&all, &path).await.expect(200);
        }
    }
    // Networks of its list may be made, no others, and the answer does not tell whether one is there.
    let settings = json!({"degree_kind": "received"});
    world.put(&own, "/v1/networks/not-made-yet", &settings).await.expect(201);
    let there = world.put(&own, "/v1/networks/zeal", &settings).await.expect_problem(403, "network_not_allowed");
    let not = world.put(&own, "/v1/networks/nowhere", &settings).await.expect_problem(403, "network_not_allowed");
    assert_eq!(there.json()["detail"], not.json()["detail"]);
    for path in ["/v1/networks/zea%6c", "/v1/networks/thornbury%2F..%2Fzeal", "/v1/networks/thornbury%00"] {
        let refused = world.put(&own, path, &settings).await;
        assert_eq!(refused.status, 403, "{path}: {refused:?}");
    }
    world.get(&own, "/v1/networks/thornb%75ry").await.expect(200);
    world
        .send(&own, "post", "/v1/forecasts", Some(json_text(&forecast_body())))
        .await
        .expect_problem(403, "beyond_networks");
    world.get(&own, "/metrics").await.expect_problem(403, "beyond_networks");
}

/// What is polled from memory is held against its rule too.
#[tokio::test]
async fn a_revoked_key_stops_within_two_seconds_on_polls_and_streams() {
    let world = Keyed::start().await;
    let keeper = world.key(terms("keeper", KeyScope::Write, &[])).await;
    let poller = world.key(terms("poller", KeyScope::Read, &["heronsgate"])).await;
    let other = world.key(terms("other", KeyScope::Read, &["thornbury"])).await;
    track(&world, &keeper).await;
    let latest = "/v1/networks/heronsgate/forecasts/latest";
    for _ in 0..3 {
        // From the second on from memory.
        world.get(&poller, latest).await.expect(200);
        world.get(&other, latest).await.expect_problem(403, "network_not_allowed");
        world.get("", latest).await.expect_problem(401, "key_required");
        world.get(&format!("{poller}0"), latest).await.expect_problem(401, "key_unknown");
    }
    let events = world.service.request(Method::GET, "/v1/networks/heronsgate/events").bearer_auth(&poller);
    let stream = events.send().await.unwrap();
    assert_eq!(stream.status(), 200);
    let ended = tokio::spawn(stream.text());
    let revoked_at = Instant::now();
    world.revoke("poller").await;
    let stopped = loop {
        let answer = world.get(&poller, latest).await;
        if answer.status == 401 {
            break answer;
        }
        assert!(revoked_at.elapsed() < Duration::from_secs(2), "the key still opens");
    };
    stopped.expect_problem(401, "key_revoked");
    tokio::time::timeout(Duration::from_secs(5), ended).await.expect("the stream ends").unwrap().unwrap();
}

/// A network with a plan and its forecast.
async fn track(world: &Keyed, key: &str) {
    let plan = json!({"degree_kind": "received", "forecast_plan": {
        "thresholds": [3], "horizon": {"ends_after": "P1M", "every": "P1M"}, "arrivals": {"per_day": 5}}});
    world.put(key, "/v1/networks/heronsgate", &plan).await.expect(201);
    let counts = json!({"degree_counts": [[0, 480], [1, 300], [2, 170], [3, 90], [5, 50], [9, 12], [20, 3]]});
    world.put(key, "/v1/networks/heronsgate/snapshots/2026-06-01", &counts).await.expect(201);
    let begun = Instant::now();
    while world.get(key, "/v1/networks/heronsgate/forecasts/latest").await.header("forecast-state") != "current" {
        assert!(begun.elapsed() < Duration::from_secs(60), "no forecast came");
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
}

#[tokio::test]
async fn a_keys_requests_are_limited_by_minute_and_day() {
    let world = Keyed::start().await;
    let keeper = world.key(terms("keeper", KeyScope::Write, &[])).await;
    track(&world, &keeper).await;
    let latest = "/v1/networks/heronsgate/forecasts/latest";
    let unlimited = world.get(&keeper, latest).await.expect(200);
    assert!(!unlimited.headers.contains_key("ratelimit") && !unlimited.headers.contains_key("ratelimit-policy"));

    let fast = world.key(KeyTerms { per_minute: Some(6), ..terms("fast", KeyScope::Read, &[]) }).await;
    for left in (0..6).rev() {
        let answer = world.get(&fast, latest).await.expect(200);
        assert_eq!(answer.header("ratelimit-policy"), "\"minute\";q=6;w=60");
        assert_eq!(answer.header("ratelimit"), format!("\"minute\";r={left};t={}", (6 - left) * 10));
    }
    for path in [latest, "/v1/networks", "/metrics"] {
        let refused = world.get(&fast, path).await.expect_problem(429, "too_many_requests");
        let wait: u64 = refused.header("retry-after").parse().unwrap();
        assert!((1..=10).contains(&wait), "{wait}");
        assert_eq!(refused.header("ratelimit"), format!("\"minute\";r=0;t={wait}"));
    }
    world.get(&keeper, latest).await.expect(200);
    world.get(&fast, "/livez").await.expect(200);

    let slow = world.key(KeyTerms { per_day: Some(4), ..terms("slow", KeyScope::Read, &[]) }).await;
    for left in [3, 2] {
        let answer = world.get(&slow, latest).await.expect(200);
        assert!(answer.header("ratelimit").starts_with(&format!("\"day\";r={left};t=")), "{answer:?}");
    }
    // What is used is kept through a restart.
    let Keyed { service, database } = world;
    let folder = service.stop_and_keep().await;
    let again = Service::start_with(|config| {
        config.access.keys = KeysNeeded::Required;
        config.database = database.clone();
    })
    .await;
    let world = Keyed { service: again, database };
    for status in [200, 200, 429, 429] {
        world.get(&slow, latest).await.expect(status);
    }
    let refused = world.get(&slow, latest).await.expect_problem(429, "quota_used_up");
    let wait: i64 = refused.header("retry-after").parse().unwrap();
    assert!((1..=86_400).contains(&wait), "{wait}");
    drop(folder);
}

/// Keys that come at once when the service does not know them yet share one meter.
#[tokio::test]
async fn a_limit_holds_for_requests_that_come_together() {
    let world = Keyed::start().await;
    let key = world.key(KeyTerms { per_minute: Some(5), ..terms("burst", KeyScope::Read, &[]) }).await;
    let sent = (0..40).map(|_| world.get(&key, "/v1/networks"));
    let answers = futures_util::future::join_all(sent).await;
    assert_eq!(answers.iter().filter(|answer| answer.status == 200).count(), 5);
    assert_eq!(answers.iter().filter(|answer| answer.status == 429).count(), 35);
}

//! Keys from the command line; where the service listens without them; other origins; and that keys are told to nobody.

use std::process::{Command, Output};
use std::time::{Duration, Instant};

use reqwest::Method;
use serde_json::{Value, json};

use crate::harness::{Service, answered};
use crate::process::{command, run, serve_with};

const REQUIRED: (&str, &str) = ("TAILCAST_ACCESS_KEYS", "required");

fn keys(folder: &std::path::Path, arguments: &[&str]) -> Output {
    let mut command: Command = command(folder);
    command.arg("keys").args(arguments);
    run(command, "")
}

fn printed(output: &Output) -> String {
    assert!(output.status.success(), "{output:?}");
    String::from_utf8(output.stdout.clone()).unwrap().trim().to_owned()
}

fn client() -> reqwest::Client {
    reqwest::Client::builder().no_proxy().build().unwrap()
}

#[tokio::test]
async fn a_key_is_made_used_listed_and_revoked_while_the_service_runs() {
    let folder = tempfile::tempdir().unwrap();
    let served = serve_with(folder.path(), &[REQUIRED]);
    let url = |path: &str| format!("http://{}{path}", served.address);
    let made = keys(
        folder.path(),
        &["create", "loader", "--scope", "write", "--network", "heronsgate", "--per-minute", "600"],
    );
    let key = printed(&made);
    assert!(key.starts_with("tailcast_") && key.len() == 90, "{key}");
    assert!(String::from_utf8_lossy(&made.stderr).contains("not shown again"));
    let put = client().put(url("/v1/networks/heronsgate")).bearer_auth(&key).json(&json!({"degree_kind": "received"}));
    assert_eq!(put.send().await.unwrap().status(), 201);

    let taken = keys(folder.path(), &["create", "loader"]);
    assert_eq!(taken.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&taken.stderr).contains("in use"), "{taken:?}");
    for wrong in [
        &["create", "a b"][..],
        &["create", "x", "--scope", "admin", "--network", "heronsgate"],
        &["create", "x", "--per-day", "0"],
        &["create", "x", "--per-day", "9223372036854775808"],
        &["create", &key],
        &["create", "x", "--expires", "2020-01-01"],
        &["create", "x", "--expires", "soon"],
        &["revoke", "nobody"],
    ] {
        assert_eq!(keys(folder.path(), wrong).status.code(), Some(2), "{wrong:?}");
    }
    let admin: Value = serde_json::from_str(&printed(&keys(
        folder.path(),
        &["create", "chief", "--scope", "admin", "--expires", "P90D", "--format", "json"],
    )))
    .unwrap();
    let list = printed(&keys(folder.path(), &["list", "--format", "json"]));
    let secret = key.rsplit('_').next().unwrap();
    assert!(!list.contains(secret) && !list.contains("digest"), "{list}");
    let list: Value = serde_json::from_str(&list).unwrap();
    assert_eq!(list[0]["name"], "loader");
    assert_eq!(list[0]["networks"], json!(["heronsgate"]));
    assert_eq!(list[1]["id"], admin["id"]);
    assert!(list[1]["expires_at"].is_string() && list[1].get("key").is_none());
    assert!(printed(&keys(folder.path(), &["list"])).contains("loader"));

    assert!(printed(&keys(folder.path(), &["revoke", "loader"])).contains("revoked loader"));
    let begun = Instant::now();
    while client().get(url("/v1/networks")).bearer_auth(&key).send().await.unwrap().status() != 401 {
        assert!(begun.elapsed() < Duration::from_secs(2), "the key still opens");
    }
    // The name is free again, a key revokes itself, and the trail has all of it.
    let again = printed(&keys(folder.path(), &["create", "loader"]));
    assert!(printed(&keys(folder.path(), &["revoke", &again])).contains("revoked loader"));
    let trail = client().get(url("/v1/audit")).bearer_auth(admin["key"].as_str().unwrap()).send().await.unwrap();
    let trail: Value = serde_json::from_str(&trail.text().await.unwrap()).unwrap();
    let paths: Vec<&str> =
        trail["items"].as_array().unwrap().iter().map(|line| line["path"].as_str().unwrap()).collect();
    let id = &again[..again.rfind('_').unwrap()];
    assert_eq!(
        paths,
        [
            &format!("keys revoke {id}_…"),
            "keys create loader",
            "keys revoke loader",
            "keys create chief",
            "/v1/networks/heronsgate",
            "keys create loader"
        ]
    );
}

#[test]
fn other_machines_are_not_served_without_keys_unless_that_is_said_in_full() {
    let folder = tempfile::tempdir().unwrap();
    let mut refused = command(folder.path());
    refused.arg("serve").env("TAILCAST_BIND", "0.0.0.0:0");
    let output = run(refused, "");
    let told = String::from_utf8_lossy(&output.stderr).into_owned();
    assert!(!output.status.success() && told.contains("TAILCAST_ACCESS_KEYS=required"), "{told}");
    assert!(!folder.path().join("tailcast.db").exists(), "nothing was begun");
    let open = ("TAILCAST_ACCESS_KEYS", "anyone_who_reaches_this_address_may_read_and_write");
    // On loopback here, so that nobody reaches the test; the warning is the setting's.
    let served = serve_with(folder.path(), &[open, ("TAILCAST_LOG_FILTER", "warn,tailcast::app=info")]);
    let begun = Instant::now();
    while !served.log.lock().unwrap().iter().any(|line| line.contains("NO ACCESS KEYS ARE ASKED FOR")) {
        assert!(begun.elapsed() < Duration::from_secs(10), "no warning");
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// Whatever a client does with its key by mistake, and at the finest grain of the log.
#[tokio::test]
async fn a_key_reaches_no_log_problem_or_trail() {
    let folder = tempfile::tempdir().unwrap();
    let served = serve_with(folder.path(), &[REQUIRED, ("TAILCAST_LOG_FILTER", "trace")]);
    let key = printed(&keys(folder.path(), &["create", "chief", "--scope", "admin"]));
    let secret = key.rsplit('_').next().unwrap().to_owned();
    let url = |path: &str| format!("http://{}{path}", served.address);
    let mut told = Vec::new();
    let client = client();
    for (method, path) in [
        (Method::GET, "/v1/networks".to_owned()),
        (Method::GET, format!("/v1/networks?key={key}")),
        (Method::GET, format!("/v1/networks?{key}=1")),
        (Method::GET, format!("/v1/networks/{key}")),
        (Method::GET, format!("/{key}")),
        (Method::GET, format!("/v1/jobs/{key}")),
        (Method::DELETE, format!("/v1/networks/{key}")),
    ] {
        for bearer in ["", "Bearer ", "Basic "] {
            let request = client.request(method.clone(), url(&path)).header("x-request-id", &key);
            let sent = request.header("authorization", format!("{bearer}{key}")).send().await.unwrap();
            told.push(format!("{:?}", sent.headers()));
            told.push(sent.text().await.unwrap());
        }
    }
    for body in [
        json!({&key: 1}),
        json!({"degree_kind": key}),
        json!({"degree_kind": "received", "forecast_plan": {"thresholds": [&key], "horizon": {"every": &key}}}),
    ] {
        let sent = client.put(url("/v1/networks/heronsgate")).bearer_auth(&key).json(&body).send().await.unwrap();
        assert_eq!(sent.status(), 400);
        told.push(sent.text().await.unwrap());
    }
    let broken =
        client.put(url("/v1/networks/heronsgate")).bearer_auth(&key).header("content-type", "application/json");
    told.push(broken.body(format!("{{{key}")).send().await.unwrap().text().await.unwrap());
    // A write that is done, under a request id that is a key.
    let put = client.put(url("/v1/networks/heronsgate")).bearer_auth(&key).json(&json!({"degree_kind": "received"}));
    assert_eq!(put.header("x-request-id", &key).send().await.unwrap().status(), 201);
    let trail = client.get(url("/v1/audit")).bearer_auth(&key).send().await.unwrap();
    assert_eq!(trail.status(), 200);
    told.push(trail.text().await.unwrap());
    tokio::time::sleep(Duration::from_millis(300)).await;
    let log = served.log.lock().unwrap().join("\n");
    assert!(log.contains("DEBUG") && log.contains("/v1/networks"), "the log is read");
    for text in told.iter().chain([&log]) {
        // A part of it that is long enough to be of use.
        assert!(!text.contains(&secret[..12]), "{}", &text[..text.len().min(2000)]);
    }
}

#[tokio::test]
async fn only_listed_origins_are_told_what_they_may() {
    let listed = "https://planning.example.org";
    let open = Service::start_with(|config| config.http.allowed_origins = vec![listed.to_owned()]).await;
    let closed = Service::start().await;
    let preflight = |service: &Service, origin: &str| {
        let request = service.request(Method::OPTIONS, "/v1/networks/heronsgate").header("origin", origin);
        request.header("access-control-request-method", "PUT").header("access-control-request-headers", "authorization")
    };
    let allowed = answered(preflight(&open, listed)).await.expect(200);
    assert_eq!(allowed.header("access-control-allow-origin"), listed);
    assert!(allowed.header("access-control-allow-methods").contains("PUT"), "{allowed:?}");
    assert!(allowed.header("access-control-allow-headers").contains("authorization"), "{allowed:?}");
    assert!(!allowed.headers.contains_key("access-control-allow-credentials"));
    let told = open.get_with("/v1/networks", "origin", listed).await.expect(200);
    assert_eq!(told.header("access-control-allow-origin"), listed);
    assert!(told.header("access-control-expose-headers").contains("etag"), "{told:?}");
    for origin in ["https://elsewhere.example.org", "null", "http://planning.example.org"] {
        let refused = answered(preflight(&open, origin)).await;
        assert_eq!(refused.header("access-control-allow-origin"), "", "{origin}");
        let told = open.get_with("/v1/networks", "origin", origin).await.expect(200);
        assert_eq!(told.header("access-control-allow-origin"), "", "{origin}");
    }
    answered(preflight(&closed, listed)).await.expect(405);
    assert_eq!(closed.get_with("/v1/networks", "origin", listed).await.header("access-control-allow-origin"), "");
}

#[tokio::test]
async fn a_job_is_followed_with_the_key_of_the_settings() {
    let folder = tempfile::tempdir().unwrap();
    let served = serve_with(folder.path(), &[REQUIRED]);
    let key = printed(&keys(folder.path(), &["create", "loader", "--scope", "write"]));
    let url = |path: &str| format!("http://{}{path}", served.address);
    let put = client().put(url("/v1/networks/heronsgate")).bearer_auth(&key).json(&json!({"degree_kind": "received"}));
    assert_eq!(put.send().await.unwrap().status(), 201);
    let links = client().put(url("/v1/networks/heronsgate/links")).bearer_auth(&key).header("content-type", "text/csv");
    let job = links.body("time,source,target\n2020-01-01,ana,ben\n").send().await.unwrap().text().await.unwrap();
    let job: Value = serde_json::from_str(&job).unwrap();
    let follow = |key: Option<&str>| {
        let mut follow = command(folder.path());
        follow.args(["follow", job["id"].as_str().unwrap()]).env("TAILCAST_BIND", served.address.to_string());
        key.map(|key| follow.env("TAILCAST_ACCESS_KEY", key));
        run(follow, "")
    };
    let refused = follow(None);
    assert!(!refused.status.success() && String::from_utf8_lossy(&refused.stderr).contains("key_required"));
    assert!(printed(&follow(Some(&key))).contains("snapshots"));
}

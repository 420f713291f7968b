//! The trail of writes.

use reqwest::Method;
use serde_json::{Value, json};
use tailcast::service::KeyScope;

use crate::access::{Keyed, terms};
use crate::harness::{Service, answered, fit_body, json_text};

const SETTINGS: &str = r#"{"degree_kind": "received"}"#;

fn items(page: &crate::harness::Answer) -> Vec<Value> {
    page.json()["items"].as_array().unwrap().clone()
}

#[tokio::test]
async fn every_write_leaves_its_line_and_nothing_else_does() {
    let world = Keyed::start().await;
    let admin = world.key(terms("chief", KeyScope::Admin, &[])).await;
    let writer = world.key(terms("loader", KeyScope::Write, &[])).await;
    let network = "/v1/networks/heronsgate";
    let settings = || Some(("application/json", SETTINGS.to_owned()));
    let put = world.send(&writer, "put", network, settings()).await.expect(201);
    // Reads, refusals, and what finds nothing to change.
    world.get(&writer, network).await.expect(200);
    world.send(&writer, "put", network, Some(("application/json", "{}".to_owned()))).await.expect(400);
    world.send(&writer, "delete", "/v1/networks/nowhere", None).await.expect(404);
    world.send(&writer, "delete", "/v1/jobs/00000000-0000-7000-8000-000000000000", None).await.expect(404);
    world.send("", "delete", network, None).await.expect(401);
    let fit = world.send(&writer, "post", "/v1/fits", Some(json_text(&fit_body()))).await.expect(201).json();
    let fit = fit["id"].as_str().unwrap();
    world.send(&admin, "delete", &format!("/v1/fits/{fit}"), None).await.expect(204);
    world.send(&admin, "delete", network, None).await.expect(204);
    world.revoke("loader").await;

    let page = world.get(&admin, "/v1/audit").await.expect(200);
    let told: Vec<_> = items(&page)
        .iter()
        .rev()
        .map(|line| {
            let text = |name: &str| line[name].as_str().unwrap_or("-").to_owned();
            (line["key"]["name"].as_str().unwrap_or("-").to_owned(), text("method"), text("path"), text("network"))
        })
        .collect();
    let line = |key: &str, method: &str, path: &str, network: &str| {
        (key.to_owned(), method.to_owned(), path.to_owned(), network.to_owned())
    };
    // The keys of this test were made without the command, which has lines of its own.
    assert_eq!(
        told,
        [
            line("loader", "PUT", network, "heronsgate"),
            line("loader", "POST", "/v1/fits", "-"),
            line("chief", "DELETE", &format!("/v1/fits/{fit}"), "-"),
            line("chief", "DELETE", network, "heronsgate"),
        ]
    );
    let lines = items(&page);
    assert_eq!(lines[3]["request_id"], put.header("x-request-id"));
    assert_eq!(lines[3]["route"], "/v1/networks/{name}");
    assert_eq!(lines[2]["made"], fit);
    assert_eq!(lines[3]["key"]["id"].as_str().map(str::len), Some(16));

    // Pages and filters.
    let first = world.get(&admin, "/v1/audit?limit=3").await.expect(200);
    assert_eq!(items(&first), lines[..3]);
    let next = first.header("link").trim_start_matches('<').split('>').next().unwrap().to_owned();
    assert_eq!(items(&world.get(&admin, &next).await.expect(200)), lines[3..]);
    let loader = lines[3]["key"]["id"].as_str().unwrap();
    let since = lines[1]["written_at"].as_str().unwrap();
    for (query, expected) in [
        (format!("key={loader}"), &lines[2..]),
        ("key=nobody".to_owned(), &lines[..0]),
        (format!("since={since}"), &lines[..2]),
        (format!("until={since}"), &lines[2..]),
        ("since=2999-01-01".to_owned(), &lines[..0]),
    ] {
        assert_eq!(items(&world.get(&admin, &format!("/v1/audit?{query}")).await.expect(200)), expected, "{query}");
    }
    let about: Vec<Value> = [&lines[0], &lines[3]].into_iter().cloned().collect();
    assert_eq!(items(&world.get(&admin, "/v1/audit?network=heronsgate").await.expect(200)), about);
    for wrong in ["since=soon", "limit=0", "cursor=x", "who=me"] {
        world.get(&admin, &format!("/v1/audit?{wrong}")).await.expect(400);
    }
}

/// Without keys the trail says what was written, and by nobody. A line that cannot be written takes its write with it.
#[tokio::test]
async fn a_write_without_its_line_is_not_done() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("trail.db");
    let url = format!("sqlite://{}", file.display());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let network = "/v1/networks/heronsgate";
    service.put(network, &serde_json::from_str(SETTINGS).unwrap()).await.expect(201);
    let lines = items(&service.get("/v1/audit").await.expect(200));
    assert_eq!(lines.len(), 1);
    assert_eq!(lines[0]["key"], json!(null));

    let options: sqlx::sqlite::SqliteConnectOptions = url.parse().unwrap();
    let mut database = sqlx::ConnectOptions::connect(&options).await.unwrap();
    let refuse = "CREATE TRIGGER refuse BEFORE INSERT ON audit BEGIN SELECT RAISE(ABORT, 'no line'); END";
    sqlx::query(refuse).execute(&mut database).await.unwrap();
    service.put("/v1/networks/thornbury", &serde_json::from_str(SETTINGS).unwrap()).await.expect(500);
    service.get("/v1/networks/thornbury").await.expect(404);
    answered(service.request(Method::DELETE, network)).await.expect(500);
    service.get(network).await.expect(200);
}

#[tokio::test]
async fn old_lines_go() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("trail.db").display());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    service.put("/v1/networks/heronsgate", &serde_json::from_str(SETTINGS).unwrap()).await.expect(201);
    service.put("/v1/networks/thornbury", &serde_json::from_str(SETTINGS).unwrap()).await.expect(201);
    service.stop().await;
    let options: sqlx::sqlite::SqliteConnectOptions = url.parse().unwrap();
    let mut database = sqlx::ConnectOptions::connect(&options).await.unwrap();
    let age = "UPDATE audit SET written_at = written_at - 3 * 86400000000 WHERE network = 'heronsgate'";
    sqlx::query(age).execute(&mut database).await.unwrap();
    sqlx::Connection::close(database).await.unwrap();
    let service = Service::start_with(|config| {
        config.database.url = url.clone();
        config.access.audit_days = 2;
    })
    .await;
    let begun = std::time::Instant::now();
    loop {
        let lines = items(&service.get("/v1/audit").await.expect(200));
        if lines.len() == 1 {
            assert_eq!(lines[0]["network"], "thornbury");
            break;
        }
        assert!(begun.elapsed().as_secs() < 10, "{lines:?}");
        tokio::time::sleep(std::time::Duration::from_millis(20)).await;
    }
}

//! `/v1/networks`: settings of tracked networks, their validators, their deletion.

use reqwest::Method;
use serde_json::{Value, json};
use sqlx::migrate::Migrator;
use sqlx::{Connection, SqliteConnection};

use crate::harness::{Service, changed, json_text};

fn settings() -> Value {
    json!({"degree_kind": "received", "description": "Followers, \"counted\" nightly", "entry_degrees": [[0, 0.75], [2, 0.25]]})
}

#[tokio::test]
async fn settings_are_stored_and_replaced() {
    let service = Service::start().await;
    let made = service.put("/v1/networks/heronsgate", &settings()).await.expect(201);
    assert_eq!(made.header("location"), "/v1/networks/heronsgate");
    assert_eq!(made.header("etag"), "", "the bytes sent are not the bytes kept");
    let read = service.get("/v1/networks/heronsgate").await.expect(200);
    let mut expected = changed(settings(), "/name", json!("heronsgate"));
    expected["forecast_plan"] = Value::Null;
    assert_eq!(read.json(), expected);
    assert_eq!(read.header("etag"), made.json()["etag"]);
    assert!(!read.header("last-modified").is_empty());
    let same = service.put("/v1/networks/heronsgate", &settings()).await.expect(200);
    assert_eq!(same.json()["etag"], made.json()["etag"], "the same settings have the same validator");
    let bare = service.put("/v1/networks/heronsgate", &json!({"degree_kind": "total"})).await.expect(200).json();
    assert_eq!(
        (&bare["degree_kind"], &bare["description"], &bare["entry_degrees"]),
        (&json!("total"), &Value::Null, &Value::Null),
        "a PUT replaces all of it"
    );
    assert_ne!(bare["etag"], made.json()["etag"]);
}

#[tokio::test]
async fn changes_are_made_under_the_callers_conditions() {
    let service = Service::start().await;
    let put = async |name: &str, value: &str, description: &str| {
        let body = changed(settings(), "/description", json!(description));
        service.put_with("/v1/networks/h", json_text(&body), &[(name, value)]).await
    };
    put("if-match", "*", "a").await.expect_problem(412, "precondition_failed");
    put("if-none-match", "*", "a").await.expect(201);
    put("if-none-match", "*", "b").await.expect_problem(412, "precondition_failed");
    let tag = service.get("/v1/networks/h").await.expect(200).header("etag").to_owned();
    put("if-match", &tag, "b").await.expect(200);
    put("if-match", &tag, "c").await.expect_problem(412, "precondition_failed");
    let read = service.get("/v1/networks/h").await.expect(200);
    assert_eq!(read.json()["description"], "b", "what was refused changed nothing");
    let tag_now = read.header("etag").to_owned();
    service.get_with("/v1/networks/h", "if-none-match", &tag_now).await.expect(304);
    service.get_with("/v1/networks/h", "if-none-match", &tag).await.expect(200);
    service.delete_if("/v1/networks/h", &tag).await.expect_problem(412, "precondition_failed");
    service.delete_if("/v1/networks/h", &tag_now).await.expect(204);
    service.get("/v1/networks/h").await.expect_problem(404, "not_found");
    service.delete_if("/v1/networks/h", &tag_now).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn a_list_runs_by_name_and_tells_what_is_stored() {
    let service = Service::start().await;
    for name in ["b", "a", "d", "c", "B"] {
        service.put(&format!("/v1/networks/{name}"), &settings()).await.expect(201);
    }
    service.put("/v1/networks/b/snapshots/2026-06-01", &json!({"degree_counts": [[0, 5]]})).await.expect(201);
    service.put("/v1/networks/b/snapshots/2026-05-01", &json!({"degree_counts": [[0, 4]]})).await.expect(201);
    service
        .put("/v1/networks/b/transitions/2026-05-01/2026-06-01", &json!({"counts": [[0, 0, 4], [null, 0, 1]]}))
        .await
        .expect(201);
    let (mut names, mut lines, mut next) = (Vec::new(), Vec::new(), "/v1/networks?limit=2".to_owned());
    while !next.is_empty() {
        let page = service.get(&next).await.expect(200);
        lines.extend(page.json()["items"].as_array().unwrap().clone());
        names = lines.iter().map(|line| line["name"].as_str().unwrap().to_owned()).collect();
        let link = page.header("link").strip_prefix('<').and_then(|link| link.strip_suffix(">; rel=\"next\""));
        next = link.unwrap_or_default().to_owned();
    }
    assert_eq!(names, ["B", "a", "b", "c", "d"]);
    let line = &lines[2];
    assert_eq!(
        [&line["snapshots"], &line["newest_snapshot"], &line["transitions"], &line["link_events"]],
        [&json!(2), &json!("2026-06-01"), &json!(1), &json!(false)]
    );
    assert_eq!(line["etag"], service.get("/v1/networks/b").await.header("etag"));
    for query in ["limit=0", "cursor=a%2Fb", "name=a"] {
        let answer = service.get(&format!("/v1/networks?{query}")).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [query.split('=').next().unwrap()]);
    }
}

#[tokio::test]
async fn names_and_settings_that_are_none_are_refused() {
    let service = Service::start().await;
    let long = "x".repeat(101);
    for name in ["a%20b", "a%00", "-a", "a%2Fb", "%C3%A9", "a:b", &long] {
        for method in [Method::GET, Method::DELETE] {
            let answer = service.send(method, &format!("/v1/networks/{name}")).await;
            assert_eq!(answer.expect_problem(400, "invalid_request").places(), ["name"], "{name}");
        }
        let answer = service.put(&format!("/v1/networks/{name}"), &settings()).await;
        let answer = answer.expect_problem(400, "invalid_request");
        assert!(answer.text.contains("starts with a letter or digit"), "{}", answer.text);
    }
    for (pointer, value, place, words) in [
        ("/degree_kind", Value::Null, "", "missing"),
        ("/degree_kind", json!("out"), "/degree_kind", "received"),
        ("/description", json!("a\u{0}"), "/description", "NUL"),
        ("/description", json!("x".repeat(2001)), "/description", "2000"),
        ("/description", json!(7), "/description", "string"),
        ("/entry_degrees", json!([[0, 0.5]]), "/entry_degrees", "add up"),
        ("/descripton", json!("x"), "/descripton", "did you mean \"description\""),
        ("/forecast_plan", json!({"thresholds": [5]}), "/forecast_plan", "horizon"),
    ] {
        let answer = service.put("/v1/networks/h", &changed(settings(), pointer, value)).await;
        let answer = answer.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [place], "{}", answer.text);
        assert!(answer.text.contains(&words.replace('"', "\\\"")), "{}", answer.text);
    }
    service.get("/v1/networks/h").await.expect_problem(404, "not_found");
    let answer = service.put("/v1/networks/h?replace=yes", &settings()).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["replace"], "a parameter that would be ignored is refused");
    service
        .put_with("/v1/networks/h", ("text/csv", String::new()), &[])
        .await
        .expect_problem(415, "unsupported_media_type");
}

#[tokio::test]
async fn the_kind_of_degree_stays_while_counts_are_stored() {
    let service = Service::start().await;
    service.put("/v1/networks/h", &settings()).await.expect(201);
    let total = changed(settings(), "/degree_kind", json!("total"));
    service.put("/v1/networks/h/link-events", &json!({"ratios": [[1, 0, 5]], "windows": []})).await.expect(201);
    let answer = service.put("/v1/networks/h", &total).await.expect_problem(409, "degree_kind_fixed");
    assert!(answer.text.contains("delete the network's snapshots"), "{}", answer.text);
    service.put("/v1/networks/h", &changed(settings(), "/description", json!("new"))).await.expect(200);
    service.send(Method::DELETE, "/v1/networks/h/link-events").await.expect(204);
    service.put("/v1/networks/h", &total).await.expect(200);
}

#[tokio::test]
async fn a_deleted_network_takes_what_is_stored_with_it() {
    let service = Service::start().await;
    let snapshot = "/v1/networks/h/snapshots/2026-06-01";
    service.put("/v1/networks/h", &settings()).await.expect(201);
    service.put(snapshot, &json!({"degree_counts": [[0, 48], [1, 30], [5, 5]]})).await.expect(201);
    let run = service.post("/v1/networks/h/fits", &json!({"fixed": {"preferential_share": 0.5}})).await.expect(201);
    service.send(Method::DELETE, "/v1/networks/h").await.expect(204);
    for path in [snapshot, "/v1/networks/h/snapshots", "/v1/networks/h/transitions", "/v1/networks/h/link-events"] {
        let answer = service.get(path).await.expect_problem(404, "not_found");
        assert!(answer.text.contains("no such network"), "{}", answer.text);
    }
    assert_eq!(service.get(run.header("location")).await.expect(200).json()["network"], "h", "runs stay");
    service.put("/v1/networks/h", &settings()).await.expect(201);
    let answer = service.get(snapshot).await.expect_problem(404, "not_found");
    assert!(answer.text.contains("no snapshot of this date"), "{}", answer.text);
}

/// A database of the version before opens, keeps its runs, and can hold networks.
#[tokio::test]
async fn a_database_with_runs_alone_is_brought_up_to_date() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::copy(
        concat!(env!("CARGO_MANIFEST_DIR"), "/migrations/0001_runs.sql"),
        folder.path().join("0001_runs.sql"),
    )
    .unwrap();
    let url = format!("sqlite://{}?mode=rwc", folder.path().join("old.db").display());
    let mut old = SqliteConnection::connect(&url).await.unwrap();
    Migrator::new(folder.path()).await.unwrap().run_direct(None, &mut old, false).await.unwrap();
    let id = "01a231cd-6fbd-74cb-ab23-3d832b2bafba";
    sqlx::query(
        "INSERT INTO runs (id, kind, network, label, created_at, engine, seed, inputs_digest, tag, document, inputs) \
         VALUES ($1, 'fit', NULL, 'old', 0, 'tailcast 0.1.0', 1, $2, 'tag', '{\"kept\":true}', '{}')",
    )
    .bind(id)
    .bind(format!("sha-256:{}", "0".repeat(64)))
    .execute(&mut old)
    .await
    .unwrap();
    old.close().await.unwrap();
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    assert_eq!(service.get_older(&format!("/v1/fits/{id}")).await.expect(200).text, "{\"kept\":true}");
    service.put("/v1/networks/heronsgate", &settings()).await.expect(201);
}

//! What is stored of tracked networks: snapshots, transitions, link events.

use reqwest::Method;
use serde_json::{Value, json};

use crate::harness::{Service, csv, json_text};

const AT: &str = "/v1/networks/h/snapshots/2026-06-01";
const BETWEEN: &str = "/v1/networks/h/transitions/2026-05-01/2026-06-01";

/// A service that tracks a network.
async fn tracking() -> Service {
    tracking_with(|_| {}).await
}

async fn tracking_with(change: impl FnOnce(&mut tailcast::config::Config)) -> Service {
    let service = Service::start_with(change).await;
    service.put("/v1/networks/h", &json!({"degree_kind": "received"})).await.expect(201);
    service
}

fn counts(pairs: Value) -> Value {
    json!({"degree_counts": pairs})
}

fn rows(rows: Value) -> Value {
    json!({"counts": rows})
}

#[tokio::test]
async fn a_snapshot_is_the_same_in_either_form() {
    let service = tracking().await;
    let made = service.put(AT, &counts(json!([[7, 1], [0, 50], [2, 10], [3, 0]]))).await.expect(201);
    assert_eq!(made.header("location"), AT);
    let line = made.json();
    assert_eq!(
        [&line["as_of"], &line["nodes"], &line["link_ends"], &line["largest_degree"], &line["degrees"]],
        [&json!("2026-06-01"), &json!(61), &json!(27), &json!(7), &json!(3)]
    );
    let read = service.get(AT).await.expect(200);
    assert_eq!(read.json()["degree_counts"], json!([[0, 50], [2, 10], [7, 1]]));
    assert_eq!(read.header("etag"), line["etag"]);
    let table = service.get(&format!("{AT}?format=csv")).await.expect(200);
    assert_eq!(table.text, "degree,nodes\r\n0,50\r\n2,10\r\n7,1\r\n");
    assert_ne!(table.header("etag"), read.header("etag"), "each form has a validator of its own");
    let again = service.put_with(AT, csv(&table.text), &[("if-match", table.header("etag"))]).await.expect(200);
    assert_eq!(again.json()["etag"], line["etag"], "the form of the body tells nothing");
    service.get_with(AT, "if-none-match", read.header("etag")).await.expect(304);
    service.get_with(AT, "accept", "image/png").await.expect_problem(406, "not_acceptable");
    service
        .put_with(AT, csv("degree,nodes\n0,49"), &[("if-none-match", "*")])
        .await
        .expect_problem(412, "precondition_failed");
    service.delete_if(AT, "\"x\"").await.expect_problem(412, "precondition_failed");
    service.delete_if(AT, read.header("etag")).await.expect(204);
    service.send(Method::DELETE, AT).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn dates_name_moments_however_they_are_written() {
    let service = tracking().await;
    let put =
        async |date: &str| service.put(&format!("/v1/networks/h/snapshots/{date}"), &counts(json!([[0, 5]]))).await;
    put("2026-06-01T02:00:00+02:00").await.expect(201);
    put("2026-06-01").await.expect(200);
    // Down to the nanosecond, and in the order of time.
    for date in ["2026-06-01T00:00:00.000000001Z", "2026-05-31T23:59:59.5Z", "0000-01-01", "9999-12-30"] {
        put(date).await.expect(201);
    }
    let list = service.get("/v1/networks/h/snapshots").await.expect(200).json();
    let dates: Vec<&str> =
        list["items"].as_array().unwrap().iter().map(|line| line["as_of"].as_str().unwrap()).collect();
    assert_eq!(
        dates,
        ["0000-01-01", "2026-05-31T23:59:59.5Z", "2026-06-01", "2026-06-01T00:00:00.000000001Z", "9999-12-30"]
    );
    let mut pages = Vec::new();
    let mut next = "/v1/networks/h/snapshots?limit=2".to_owned();
    while !next.is_empty() {
        let page = service.get(&next).await.expect(200);
        pages.extend(page.json()["items"].as_array().unwrap().clone());
        let link = page.header("link").strip_prefix('<').and_then(|link| link.strip_suffix(">; rel=\"next\""));
        next = link.unwrap_or_default().to_owned();
    }
    assert_eq!(&pages, list["items"].as_array().unwrap());
    for date in ["yesterday", "2026-02-30", "2026-06-01T00:00:00", "0000-01-01T00:00:00+05:00", "%00", "2026-06-01Z"] {
        let answer = put(date).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), ["as_of"], "{date}");
    }
    let answer = service.get("/v1/networks/h/snapshots?cursor=x").await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["cursor"]);
}

#[tokio::test]
async fn what_is_no_snapshot_is_refused_in_either_form() {
    let service = tracking().await;
    for (body, places) in [
        (json_text(&counts(json!([]))), vec!["/degree_counts"]),
        (json_text(&json!({})), vec![""]),
        (json_text(&json!({"degree_counts": [[0, 1]], "as_of": "2026-06-01"})), vec!["/as_of"]),
        (json_text(&counts(json!([[0, -1], [1, 1.5]]))), vec!["/degree_counts/0/1", "/degree_counts/1/1"]),
        (json_text(&counts(json!([[0, null]]))), vec!["/degree_counts/0/1"]),
        (csv(""), vec!["line 1"]),
        (csv("degree;nodes\n0;1\n"), vec!["line 1"]),
        (csv("degree,nodes\n0,1\n1,-1\n2,x\n"), vec!["line 3", "line 4"]),
        (csv("degree,nodes\n0,1\n0,1\n"), vec!["line 3"]),
        (csv("degree,nodes\n0,1,7\n"), vec!["line 2"]),
        (csv("degree,nodes\n\"0,1\n"), vec!["line 2"]),
        (csv("degree,nodes\n0,\u{0}\n"), vec!["line 2"]),
        (csv("degree,nodes\nNaN,1e400\n"), vec!["line 2", "line 2"]),
    ] {
        let context = body.1.clone();
        let answer = service.put_with(AT, body, &[]).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), places, "{context}: {}", answer.text);
    }
    let wrong: String = (0..5000).map(|degree| format!("{degree},-1\n")).collect();
    let answer = service.put_with(AT, csv(&format!("degree,nodes\n{wrong}")), &[]).await.expect(400);
    assert!(answer.places().len() == 100 && answer.text.contains("4900 more"), "{}", answer.text);
    for kind in ["text/plain", "text/csv; charset=latin1", "text/tab-separated-values"] {
        let answer = service.put_with(AT, (kind, "degree,nodes\n0,1\n".into()), &[]).await;
        answer.expect_problem(415, "unsupported_media_type");
    }
    let compressed = service.put_with(AT, csv("degree,nodes\n0,1\n"), &[("content-encoding", "gzip")]).await;
    compressed.expect_problem(415, "unsupported_encoding");
    service.get(AT).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn transitions_are_the_same_in_either_form() {
    let service = tracking().await;
    let made =
        service.put(BETWEEN, &rows(json!([[null, 0, 20], [3, null, 2], [0, 1, 7], [5, 6, 0]]))).await.expect(201);
    assert_eq!(made.header("location"), BETWEEN);
    let line = made.json();
    assert_eq!(
        [&line["stayed"], &line["arrived"], &line["departed"], &line["rows"]],
        [&json!(7), &json!(20), &json!(2), &json!(3)]
    );
    let read = service.get(BETWEEN).await.expect(200);
    assert_eq!(read.json()["counts"], json!([[null, 0, 20], [0, 1, 7], [3, null, 2]]));
    let table = service.get_with(BETWEEN, "accept", "text/csv").await.expect(200);
    assert_eq!(table.text, "degree_before,degree_after,nodes\r\n,0,20\r\n0,1,7\r\n3,,2\r\n");
    let again = service.put_with(BETWEEN, csv(&table.text), &[("if-match", read.header("etag"))]).await.expect(200);
    assert_eq!(again.json()["etag"], line["etag"]);
    let list = service.get("/v1/networks/h/transitions").await.expect(200).json();
    assert_eq!(list["items"], json!([again.json()]));
    for (body, place) in [
        (json_text(&rows(json!([[null, null, 1], [0, 0, 1]]))), "/counts/0"),
        (json_text(&rows(json!([[null, 1, 1]]))), "/counts"),
        (csv("degree_before,degree_after,nodes\n0,0,1\n,,1\n"), "line 3"),
        (csv("degree_before,degree_after,nodes\n0,0,1\n0,0,1\n"), "line 3"),
        (csv("degree_before,degree_after,nodes\n,1,1\n"), "line 1"),
        (csv("before,after,nodes\n0,1,1\n"), "line 1"),
    ] {
        let answer = service.put_with(BETWEEN, body, &[]).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [place], "{}", answer.text);
    }
    let backwards = "/v1/networks/h/transitions/2026-06-01/2026-05-01";
    let answer = service.put(backwards, &rows(json!([[0, 1, 1]]))).await.expect_problem(400, "invalid_request");
    assert!(answer.text.contains("not after its start"), "{}", answer.text);
    service.get("/v1/networks/h/transitions/2026-05-01/2026-05-31").await.expect_problem(404, "not_found");
    service.delete_if(BETWEEN, read.header("etag")).await.expect(204);
    service.get(BETWEEN).await.expect_problem(404, "not_found");
}

#[tokio::test]
async fn counts_that_contradict_each_other_are_refused_whichever_comes_first() {
    let service = tracking().await;
    service.put(AT, &counts(json!([[0, 20], [1, 7]]))).await.expect(201);
    let wrong = rows(json!([[null, 0, 20], [0, 1, 8]]));
    let answer = service.put(BETWEEN, &wrong).await.expect_problem(409, "counts_differ");
    for words in ["from 2026-05-01 to 2026-06-01", "at 2026-06-01", "28 nodes", "has 27", "delete the stored one"] {
        assert!(answer.text.contains(words), "{words}: {}", answer.text);
    }
    service.get(BETWEEN).await.expect_problem(404, "not_found");
    service.put(BETWEEN, &rows(json!([[null, 0, 20], [0, 1, 7]]))).await.expect(201);
    let answer = service.put(AT, &counts(json!([[0, 20], [1, 6]]))).await.expect_problem(409, "counts_differ");
    assert!(answer.text.contains("27 nodes, where the snapshot has 26"), "{}", answer.text);
    let start = "/v1/networks/h/snapshots/2026-05-01";
    let answer = service.put(start, &counts(json!([[0, 6]]))).await.expect_problem(409, "counts_differ");
    assert!(answer.text.contains("7 nodes, where the snapshot has 6"), "{}", answer.text);
    service.put(start, &counts(json!([[0, 7]]))).await.expect(201);
    // Periods may touch, with the same counts where they do, and must not overlap.
    let next = "/v1/networks/h/transitions/2026-06-01/2026-07-01";
    let moved = rows(json!([[0, 0, 20], [1, 1, 6], [1, 2, 1]]));
    let over = "/v1/networks/h/transitions/2026-05-15/2026-07-01";
    let answer = service.put(over, &moved).await.expect_problem(409, "transitions_overlap");
    assert!(answer.text.contains("2026-05-01 to 2026-06-01 are stored"), "{}", answer.text);
    service
        .put("/v1/networks/h/transitions/2026-05-01/2026-05-20", &rows(json!([[0, 0, 7]])))
        .await
        .expect_problem(409, "transitions_overlap");
    service.send(Method::DELETE, AT).await.expect(204);
    let answer = service.put(next, &rows(json!([[0, 0, 20]]))).await.expect_problem(409, "counts_differ");
    assert!(answer.text.contains("other degree counts at 2026-06-01 than these"), "{}", answer.text);
    service.put(next, &moved).await.expect(201);
    // A table that replaces another answers to its neighbours too.
    service
        .put(BETWEEN, &rows(json!([[null, 0, 20], [0, 1, 7], [0, null, 1]])))
        .await
        .expect_problem(409, "counts_differ");
    let all_gone = "/v1/networks/h/transitions/2026-07-01/2026-08-01";
    service.put(all_gone, &rows(json!([[0, null, 20], [1, null, 6], [2, null, 1]]))).await.expect(201);
    let answer = service.put("/v1/networks/h/snapshots/2026-08-01", &counts(json!([[0, 1]]))).await;
    answer.expect_problem(409, "counts_differ");
}

#[tokio::test]
async fn link_events_come_back_in_the_form_in_which_they_are_given() {
    let service = tracking().await;
    let path = "/v1/networks/h/link-events";
    let given = json!({"ratios": [[0.5, 0.01, 30], [8.0, 0.2, 5]], "windows": [{"cells": [[0, 0, 22, 900.5, 0.0]]}, {"cells": []}]});
    let made = service.put(path, &given).await.expect(201).json();
    assert_eq!([&made["landings"], &made["rows"]], [&json!(35), &json!(3)]);
    let read = service.get(path).await.expect(200);
    assert_eq!(read.json(), given);
    assert_eq!(read.header("etag"), made["etag"]);
    assert_eq!(service.put(path, &read.json()).await.expect(200).json()["etag"], made["etag"]);
    let answer = service.put(path, &json!({"ratios": [[1, 0, -1]], "windows": 7})).await.expect(400);
    assert_eq!(answer.places(), ["/ratios/0/2", "/windows"]);
    service
        .put_with(path, json_text(&given), &[("if-none-match", "*")])
        .await
        .expect_problem(412, "precondition_failed");
    service.get_with(path, "if-none-match", read.header("etag")).await.expect(304);
    service.delete_if(path, read.header("etag")).await.expect(204);
    let answer = service.get(path).await.expect_problem(404, "not_found");
    assert!(answer.text.contains("no link events"), "{}", answer.text);
}

#[tokio::test]
async fn nothing_is_stored_of_a_network_that_is_not_tracked() {
    let service = tracking().await;
    for (path, body) in [
        ("snapshots/2026-06-01", counts(json!([[0, 1]]))),
        ("transitions/2026-05-01/2026-06-01", rows(json!([[0, 1, 1]]))),
        ("link-events", json!({"ratios": [[1, 0, 5]], "windows": []})),
    ] {
        let path = format!("/v1/networks/nowhere/{path}");
        for answer in
            [service.put(&path, &body).await, service.get(&path).await, service.send(Method::DELETE, &path).await]
        {
            let answer = answer.expect_problem(404, "not_found");
            assert!(answer.text.contains("PUT its settings"), "{}", answer.text);
        }
    }
    for list in ["snapshots", "transitions"] {
        service.get(&format!("/v1/networks/nowhere/{list}")).await.expect_problem(404, "not_found");
    }
}

#[tokio::test]
async fn a_network_has_no_more_than_is_configured() {
    let service = tracking_with(|config| config.limits.network_rows = 5).await;
    service.put(AT, &counts(json!([[0, 1], [1, 1], [2, 1]]))).await.expect(201);
    let answer = service.put(BETWEEN, &rows(json!([[0, 0, 1], [0, 1, 1], [0, 2, 1]]))).await;
    let answer = answer.expect_problem(409, "network_full");
    assert!(answer.text.contains("6 rows") && answer.text.contains("network_rows"), "{}", answer.text);
    // What is replaced does not count.
    service.put(AT, &counts(json!([[0, 1], [1, 1], [2, 1], [3, 1], [4, 1]]))).await.expect(200);
    service
        .put(AT, &counts(json!([[0, 1], [1, 1], [2, 1], [3, 1], [4, 1], [5, 1]])))
        .await
        .expect_problem(409, "network_full");
    service
        .put("/v1/networks/h/link-events", &json!({"ratios": [[1, 0, 5]], "windows": []}))
        .await
        .expect_problem(409, "network_full");
    let service = tracking_with(|config| config.limits.degree_counts = 2).await;
    let answer = service.put(AT, &counts(json!([[0, 1], [1, 1], [2, 1]]))).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["/degree_counts"]);
    let answer = service.put_with(AT, csv("degree,nodes\n0,1\n1,1\n2,1\n"), &[]).await.expect(400);
    assert_eq!(answer.places(), ["line 4"]);
}

/// Writers at the same time: each change is seen whole, and of those under one condition exactly one is made.
#[tokio::test(flavor = "multi_thread")]
async fn of_many_changes_to_one_state_one_is_made() {
    let service = tracking().await;
    service.put(AT, &counts(json!([[0, 1]]))).await.expect(201);
    let tag = service.get(AT).await.expect(200).header("etag").to_owned();
    let changes: Vec<_> = (2..12)
        .map(|nodes| {
            let request = service.request(Method::PUT, AT).header("if-match", &tag).json(&counts(json!([[0, nodes]])));
            tokio::spawn(async move { request.send().await.unwrap().status().as_u16() })
        })
        .collect();
    let mut made = 0;
    for change in changes {
        match change.await.unwrap() {
            200 => made += 1,
            status => assert_eq!(status, 412),
        }
    }
    assert_eq!(made, 1);
}

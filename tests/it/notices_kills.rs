//! Events through kills at any moment: each passing of a limit's line is told, with one event, whatever was under way.

use std::collections::BTreeSet;
use std::time::{Duration, Instant};

use reqwest::Client;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};

use crate::harness::{COUNTS, pairs};
use crate::notice_receiver::{Receiver, SECRET};
use crate::notices::{growing, limit};
use crate::process::{Served, serve_with};

/// Times the process is killed.
const ROUNDS: u64 = 12;

fn start(folder: &std::path::Path, receiver: &Receiver, filter: &str) -> Served {
    let variables = [
        ("TAILCAST_NOTICES_DESTINATIONS", receiver.origin()),
        ("TAILCAST_NOTICES_SECRET", SECRET.to_owned()),
        ("TAILCAST_NOTICES_FIRST_PAUSE_MS", "50".to_owned()),
        ("TAILCAST_NOTICES_LONGEST_PAUSE_SECONDS", "1".to_owned()),
        ("TAILCAST_LOG_FILTER", filter.to_owned()),
    ];
    serve_with(folder, &variables.each_ref().map(|(name, value)| (*name, value.as_str())))
}

async fn put(client: &Client, served: &Served, path: &str, body: &Value) -> bool {
    let put = client.put(format!("http://{}/v1/networks/heronsgate{path}", served.address)).json(body).send().await;
    put.is_ok_and(|answer| answer.status().is_success())
}

async fn read(client: &Client, served: &Served, path: &str) -> Value {
    client.get(format!("http://{}{path}", served.address)).send().await.unwrap().json().await.unwrap()
}

/// Waits until the newest forecast is made and every event is taken.
async fn rests(client: &Client, served: &Served) {
    let begun = Instant::now();
    loop {
        let network = read(client, served, "/v1/networks").await["items"][0].clone();
        let notice = read(client, served, "/v1/networks/heronsgate/notices/on-call").await;
        if network["refresh"]["state"] == "current" && notice["deliveries"]["pending"] == 0 {
            return;
        }
        assert!(begun.elapsed() < Duration::from_secs(120), "{network} {notice}");
        tokio::time::sleep(Duration::from_millis(20)).await;
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn no_kill_loses_an_event_or_makes_one_twice() {
    let folder = tempfile::tempdir().unwrap();
    let client = Client::builder().no_proxy().build().unwrap();
    let receiver = Receiver::start().await;
    let served = start(folder.path(), &receiver, "warn,tailcast::app=info");
    assert!(put(&client, &served, "", &growing(false)).await);
    assert!(put(&client, &served, "/snapshots/2026-06-01", &json!({"degree_counts": pairs(&COUNTS[1])})).await);
    assert!(put(&client, &served, "/notices/on-call", &json!({"url": receiver.hook()})).await);
    assert!(put(&client, &served, "/limits/fan-out", &limit()).await);
    rests(&client, &served).await;
    served.kill();
    for round in 0..ROUNDS {
        let served = start(folder.path(), &receiver, "warn,tailcast::app=info");
        // Some are not taken at first.
        receiver.will_answer(if round % 3 == 0 { &[500] } else { &[] });
        // What has been told last is to end, or to begin again.
        let told = receiver.events().len();
        assert!(put(&client, &served, "", &growing(told % 2 == 0)).await);
        if round % 2 == 0 {
            // As soon as the next event has come, before that can be noted.
            let begun = Instant::now();
            while receiver.events().len() == told && begun.elapsed() < Duration::from_secs(30) {
                tokio::time::sleep(Duration::from_millis(1)).await;
            }
        } else {
            // At a different moment each round: while it computes, stores, sends, notes that an event was taken.
            tokio::time::sleep(Duration::from_millis(41 * round * round % 700)).await;
        }
        served.kill();
    }
    let served = start(folder.path(), &receiver, "warn,tailcast::app=info");
    rests(&client, &served).await;
    drop(served);

    // What must have been told, by the forecasts that were issued and nothing else.
    let url = format!("sqlite://{}", folder.path().join("tailcast.db").display());
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    let issued: Vec<String> = sqlx::query_scalar(
        "SELECT r.document FROM runs r JOIN network_runs n ON n.run_id = r.id WHERE n.issued_to IS NOT NULL ORDER BY r.id",
    )
    .fetch_all(&mut database)
    .await
    .unwrap();
    let mut expected = Vec::new();
    let mut above = false;
    for document in &issued {
        let run: Value = serde_json::from_str(document).unwrap();
        let Some(answer) = run["limits"].get(0) else { continue };
        let now = answer["at_by"]["crossed"].as_f64().unwrap() > answer["risk"].as_f64().unwrap();
        if now != above {
            let kind = if now { "tailcast.limit.risk_passed" } else { "tailcast.limit.within_again" };
            expected.push((run["id"].clone(), json!(kind)));
        }
        above = now;
    }
    assert!(expected.len() >= 4, "{} of {} forecasts were news", expected.len(), issued.len());
    let events = receiver.events();
    let came: Vec<(Value, Value)> =
        events.iter().map(|event| (event["data"]["forecast"].clone(), event["type"].clone())).collect();
    assert_eq!(came, expected, "each once, in order");
    let kept: Vec<String> = sqlx::query_scalar("SELECT id FROM notice_events").fetch_all(&mut database).await.unwrap();
    let kept: BTreeSet<String> = kept.into_iter().collect();
    let ids: BTreeSet<String> = events.iter().map(|event| event["id"].as_str().unwrap().to_owned()).collect();
    assert_eq!(ids, kept);
    eprintln!("{} calls for {} events of {} forecasts", receiver.calls().len(), events.len(), issued.len());
}

#[tokio::test(flavor = "multi_thread")]
async fn the_secret_is_neither_logged_nor_answered() {
    let folder = tempfile::tempdir().unwrap();
    let client = Client::builder().no_proxy().build().unwrap();
    let receiver = Receiver::start().await;
    let served = start(folder.path(), &receiver, "trace");
    receiver.will_answer(&[500]);
    assert!(put(&client, &served, "", &growing(true)).await);
    assert!(put(&client, &served, "/snapshots/2026-06-01", &json!({"degree_counts": pairs(&COUNTS[1])})).await);
    assert!(put(&client, &served, "/notices/on-call", &json!({"url": receiver.hook()})).await);
    assert!(put(&client, &served, "/limits/fan-out", &limit()).await);
    receiver.wait_for(2).await;
    rests(&client, &served).await;
    let bare = SECRET.strip_prefix("whsec_").unwrap();
    for path in ["/v1/networks/heronsgate/notices/on-call", "/v1/networks/heronsgate/notices", "/v1/networks"] {
        assert!(!read(&client, &served, path).await.to_string().contains(bare), "{path}");
    }
    let log = served.log.lock().unwrap().join("\n");
    assert!(log.contains("a notice was not taken"), "the log is the one meant");
    assert!(!log.contains(bare) && !log.contains("Heronsgate keeps its secret well"));
    drop(served);
}

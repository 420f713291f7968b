//! What was acknowledged is kept: through kills at any moment, and through a stop in good order.

use std::collections::BTreeMap;
use std::path::Path;
use std::sync::{Arc, Mutex};
use std::time::Duration;

use reqwest::Client;
use serde_json::{Value, json};

use crate::harness::{changed, fit_body, forecast_body};
use crate::process::{Served, serve};

/// Times the process is killed.
const ROUNDS: u64 = 8;
const POSTERS: u64 = 3;

/// Every 201 so far: where it is kept, its bytes, the key and body it was made with.
type Acknowledged = Arc<Mutex<Vec<(String, String, Option<String>, Value)>>>;

#[tokio::test(flavor = "multi_thread")]
async fn no_kill_loses_an_acknowledged_run() {
    let folder = tempfile::tempdir().unwrap();
    let acknowledged = Acknowledged::default();
    let mut asked_keys = Vec::new();
    for round in 0..ROUNDS {
        let served = serve(folder.path());
        let posters: Vec<_> = (0..POSTERS)
            .map(|poster| tokio::spawn(post_until_it_dies(served.address, round, poster, acknowledged.clone())))
            .collect();
        // At a different moment each round: while opening, computing, writing, answering.
        tokio::time::sleep(Duration::from_millis(60 + 97 * round % 400)).await;
        served.kill();
        for poster in posters {
            asked_keys.extend(poster.await.unwrap());
        }
    }
    let served = serve(folder.path());
    let client = Client::builder().no_proxy().build().unwrap();
    let kept = acknowledged.lock().unwrap().clone();
    assert!(kept.len() as u64 > ROUNDS, "only {} runs were acknowledged before the kills", kept.len());
    for (location, text, key, body) in &kept {
        let read = client.get(format!("http://{}{location}", served.address)).send().await.unwrap();
        assert_eq!((read.status().as_u16(), read.text().await.unwrap().as_str()), (200, text.as_str()), "{location}");
        if let Some(key) = key {
            let again = post(&client, &served, Some(key), body).await.unwrap();
            assert_eq!(&again.1, text, "the key still leads to its run");
        }
    }
    // A key whose answer never arrived leads to one run, whether it was kept before the kill or is made now.
    for (key, body) in &asked_keys {
        let first = post(&client, &served, Some(key), body).await.unwrap();
        let second = post(&client, &served, Some(key), body).await.unwrap();
        assert_eq!(first, second);
    }
    let mut labels = BTreeMap::<String, u64>::new();
    for (key, _) in &asked_keys {
        let page = client.get(format!("http://{}/v1/fits?label={key}", served.address)).send().await.unwrap();
        let page: Value = page.json().await.unwrap();
        *labels.entry(key.clone()).or_default() += page["items"].as_array().unwrap().len() as u64;
    }
    assert!(labels.values().all(|&runs| runs == 1), "{labels:?}");
}

/// Posts until the connection breaks; returns the keys asked with and their bodies.
async fn post_until_it_dies(
    address: std::net::SocketAddr,
    round: u64,
    poster: u64,
    acknowledged: Acknowledged,
) -> Vec<(String, Value)> {
    let client = Client::builder().no_proxy().build().unwrap();
    let mut asked = Vec::new();
    for count in 0.. {
        let key = (count % 2 == 0).then(|| format!("{round}-{poster}-{count}"));
        let body = changed(fit_body(), "/fixed", json!({"preferential_share": 0.7}));
        let body = changed(body, "/label", json!(key.clone().unwrap_or_else(|| "no key".into())));
        if let Some(key) = &key {
            asked.push((key.clone(), body.clone()));
        }
        match try_post(&client, address, key.as_deref(), &body).await {
            Ok((location, text)) => acknowledged.lock().unwrap().push((location, text, key, body)),
            Err(_) => break,
        }
    }
    asked
}

async fn post(
    client: &Client,
    served: &Served,
    key: Option<&String>,
    body: &Value,
) -> reqwest::Result<(String, String)> {
    try_post(client, served.address, key.map(String::as_str), body).await
}

/// Location and bytes of a 201.
async fn try_post(
    client: &Client,
    address: std::net::SocketAddr,
    key: Option<&str>,
    body: &Value,
) -> reqwest::Result<(String, String)> {
    let mut request = client.post(format!("http://{address}/v1/fits")).json(body);
    if let Some(key) = key {
        request = request.header("idempotency-key", key);
    }
    let response = request.send().await?;
    assert_eq!(response.status().as_u16(), 201);
    let location = response.headers()["location"].to_str().unwrap().to_owned();
    Ok((location, response.text().await?))
}

/// One snapshot is replaced again and again, each time with a node more: after a kill it is the last one acknowledged, or
/// the one that was being stored.
#[tokio::test(flavor = "multi_thread")]
async fn no_kill_loses_an_acknowledged_snapshot() {
    let folder = tempfile::tempdir().unwrap();
    let client = Client::builder().no_proxy().build().unwrap();
    let mut nodes = 0;
    for round in 0..4 {
        let served = serve(folder.path());
        let network = format!("http://{}/v1/networks/heronsgate", served.address);
        let snapshot = format!("{network}/snapshots/2026-06-01");
        let settings = client.put(&network).json(&json!({"degree_kind": "received"})).send().await.unwrap();
        assert!(settings.status().is_success());
        if round > 0 {
            let kept: Value = client.get(&snapshot).send().await.unwrap().json().await.unwrap();
            let found = kept["nodes"].as_u64().unwrap();
            assert!(found == nodes || found == nodes + 1, "{found} nodes, where {nodes} were acknowledged");
            nodes = found;
        }
        let writer = tokio::spawn({
            let (client, mut nodes) = (client.clone(), nodes);
            async move {
                loop {
                    let body = json!({"degree_counts": [[0, nodes + 1]]});
                    match client.put(&snapshot).json(&body).send().await {
                        Ok(answer) => assert!(answer.status().is_success()),
                        Err(_) => return nodes,
                    }
                    nodes += 1;
                }
            }
        });
        tokio::time::sleep(Duration::from_millis(80 + 53 * round)).await;
        served.kill();
        let acknowledged = writer.await.unwrap();
        assert!(acknowledged > nodes, "nothing was acknowledged before the kill");
        nodes = acknowledged;
    }
}

#[cfg(unix)]
#[tokio::test]
async fn a_terminated_service_ends_in_good_order() {
    let folder = tempfile::tempdir().unwrap();
    let mut served = serve(folder.path());
    let client = Client::builder().no_proxy().build().unwrap();
    let response =
        client.post(format!("http://{}/v1/forecasts", served.address)).json(&forecast_body()).send().await.unwrap();
    assert_eq!(response.status().as_u16(), 201);
    let signal = std::process::Command::new("kill").args(["-TERM", &served.child.id().to_string()]).status().unwrap();
    assert!(signal.success());
    assert!(served.child.wait().unwrap().success());
    assert!(!Path::exists(&folder.path().join("tailcast.db-wal")), "the write-ahead log is folded into the database");
}

/// A body of hundreds of megabytes is refused early, without being held in memory.
#[cfg(target_os = "linux")]
#[tokio::test(flavor = "multi_thread")]
async fn a_hundred_million_pairs_are_refused_in_little_memory() {
    use std::io::{Read, Write};
    let folder = tempfile::tempdir().unwrap();
    let served = serve(folder.path());
    let before = peak_memory_kb(served.child.id());
    let pairs = "[1,1],".repeat(10_000);
    // Announced in full: refused by its length alone.
    let length = 100_000_000u64 * 6;
    let mut announced = std::net::TcpStream::connect(served.address).unwrap();
    write!(announced, "{HEAD}Content-Length: {length}\r\n\r\n").unwrap();
    let mut response = [0; 4096];
    let read = announced.read(&mut response).unwrap();
    assert!(String::from_utf8_lossy(&response[..read]).starts_with("HTTP/1.1 413"));
    // In chunks, without a word about the length: refused when the limit is passed.
    let mut chunked = std::net::TcpStream::connect(served.address).unwrap();
    write!(chunked, "{HEAD}Transfer-Encoding: chunked\r\n\r\n").unwrap();
    chunked.set_nonblocking(false).unwrap();
    let mut sent = 0;
    while sent < length {
        let chunk = format!("{:x}\r\n{pairs}\r\n", pairs.len());
        if chunked.write_all(chunk.as_bytes()).is_err() {
            break;
        }
        sent += pairs.len() as u64;
    }
    assert!(sent < length / 4, "the service read {sent} bytes of a body it must refuse");
    let grown = peak_memory_kb(served.child.id()) - before;
    assert!(grown < 200 * 1024, "peak memory grew by {grown} kB");
    let client = Client::builder().no_proxy().build().unwrap();
    assert!(client.get(format!("http://{}/livez", served.address)).send().await.unwrap().status().is_success());
}

#[cfg(target_os = "linux")]
const HEAD: &str = "POST /v1/fits HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\n";

#[cfg(target_os = "linux")]
fn peak_memory_kb(process: u32) -> u64 {
    let status = std::fs::read_to_string(format!("/proc/{process}/status")).unwrap();
    let line = status.lines().find(|line| line.starts_with("VmHWM:")).unwrap();
    line.split_whitespace().nth(1).unwrap().parse().unwrap()
}

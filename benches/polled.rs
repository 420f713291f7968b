//! Polls of a network's latest forecast beside a bare axum route that answers the same bytes and headers: requests a second with 200 and
//! with 304, and processor time of the server a request. Ratios hold, rates do not.
//!
//! usage: cargo bench --bench polled
//!
//! One client thread keeps two batches of requests under way on keep-alive connections, one request a connection, so the server, which
//! has one worker thread, always has work. Rounds of the services alternate; medians are told.
#![allow(clippy::unwrap_used, clippy::panic, clippy::print_stdout, missing_docs)]

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

use axum::Router;
use axum::body::Bytes;
use axum::http::{HeaderMap, HeaderValue};
use axum::routing::get;
use tailcast::config::Config;
use tailcast::growth::Simulation;
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};
use tokio::runtime::{Builder, Runtime};

const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";
/// Connections of one batch.
const BATCH: usize = 8;
const ROUNDS: usize = 15;
const ROUND: Duration = Duration::from_millis(700);
/// Says which filter a child process logs by.
const FILTER: &str = "POLLED_BENCH_FILTER";

fn main() {
    let Ok(filter) = std::env::var(FILTER) else {
        for filter in ["info", "warn"] {
            // Logs go where they cost as much as anywhere fast, the figures to this process's output.
            let child =
                Command::new(std::env::current_exe().unwrap()).env(FILTER, filter).stderr(Stdio::null()).status();
            assert!(child.unwrap().success());
        }
        return;
    };
    compare(&filter);
}

fn compare(filter: &str) {
    let folder = tempfile::tempdir().unwrap();
    let variables = [
        ("TAILCAST_BIND", "127.0.0.1:0".to_owned()),
        ("TAILCAST_DATABASE_URL", format!("sqlite://{}", folder.path().join("bench.db").display())),
        ("TAILCAST_LOG_FILTER", filter.to_owned()),
    ];
    let config = Config::from_sources(None, variables.map(|(k, v)| (k.to_owned(), v)).into_iter()).unwrap();
    tailcast::telemetry::start(&config.log, &config.telemetry).unwrap();
    let runtime = runtime("polled");
    let running = runtime.block_on(tailcast::app::start(config)).unwrap_or_else(|stop| panic!("{stop:?}"));
    let polled = running.address();
    let (headers, body) = forecast_of(polled);
    let etag = value_of(&headers, "etag").to_owned();
    let bare_runtime = self::runtime("bare");
    let bare = serve_bare(&bare_runtime, &headers, Bytes::from(body.clone()));
    let plain = request("");
    let unmodified = request(&format!("if-none-match: {etag}\r\n"));
    let kinds =
        [("bare 200", "bare", bare, &plain), ("200", "polled", polled, &plain), ("304", "polled", polled, &unmodified)];
    let mut found = kinds.map(|_| Vec::new());
    for round in 0..=ROUNDS {
        for ((_, thread, address, request), found) in kinds.iter().zip(&mut found) {
            let measured = measure(*address, request, thread);
            // The first round warms up.
            if round > 0 {
                found.push(measured);
            }
        }
    }
    println!("latest forecast of {} bytes, log filter {filter:?}; medians of {ROUNDS} interleaved rounds", body.len());
    let medians = found.map(|rounds| [0, 1, 2].map(|i| median(rounds.iter().map(|round| round[i]).collect())));
    for ((name, ..), [rate, micros, busy]) in kinds.iter().zip(medians) {
        println!(
            "  {name:<8} {rate:>8.0} requests/s, {:.2} of the bare route   server {micros:>5.2} us a request, busy {:.0} %",
            rate / medians[0][0],
            busy * 100.0
        );
    }
    runtime.block_on(running.stop());
}

/// A runtime of one named worker thread, on which everything that serves runs.
fn runtime(name: &str) -> Runtime {
    Builder::new_multi_thread().worker_threads(1).thread_name(name).enable_all().build().unwrap()
}

/// Tracks a network with a year of monthly dates and five thresholds, and returns its latest forecast when that is made.
fn forecast_of(address: SocketAddr) -> (Vec<(String, String)>, String) {
    let plan =
        r#"{"thresholds":[5,10,20,50,100],"horizon":{"ends_after":"P1Y","every":"P1M"},"arrivals":{"per_day":50.0}}"#;
    send(address, "PUT", "/v1/networks/heronsgate", &format!(r#"{{"degree_kind":"received","forecast_plan":{plan}}}"#));
    let counts: Vec<String> = counts().iter().map(|(degree, nodes)| format!("[{degree},{nodes}]")).collect();
    let snapshot = format!(r#"{{"degree_counts":[{}]}}"#, counts.join(","));
    send(address, "PUT", "/v1/networks/heronsgate/snapshots/2026-06-01", &snapshot);
    loop {
        let (headers, body) = send(address, "GET", LATEST, "");
        if headers.iter().any(|(name, value)| name == "forecast-state" && value == "current") {
            return (headers, body);
        }
        std::thread::sleep(Duration::from_millis(50));
    }
}

fn counts() -> DegreeCounts {
    let mix = AttachmentMix::new(0.7).unwrap();
    let arrivals = ArrivalPlan::constant(50.0).unwrap();
    let forces = GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap();
    let founders = DegreeCounts::from_pairs(&[(0, 10), (2, 10)]).unwrap();
    let mut network = Simulation::new(&founders, forces, 11).unwrap();
    network.run_until(90.0).unwrap();
    network.degree_counts().unwrap()
}

/// The bare route: the same headers and bytes, made beforehand.
fn serve_bare(runtime: &Runtime, headers: &[(String, String)], body: Bytes) -> SocketAddr {
    let mut map = HeaderMap::new();
    for (name, value) in headers.iter().filter(|(name, _)| name != "date" && name != "content-length") {
        let name: axum::http::HeaderName = name.parse().unwrap();
        map.insert(name, HeaderValue::from_str(value).unwrap());
    }
    let answer = move || {
        let (map, body) = (map.clone(), body.clone());
        async move { (map, body) }
    };
    let routes = Router::new().route(&LATEST.replace("heronsgate", "{name}"), get(answer));
    runtime.block_on(async {
        let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
        let address = listener.local_addr().unwrap();
        tokio::spawn(async move { axum::serve(listener, routes).await });
        address
    })
}

fn request(headers: &str) -> Vec<u8> {
    format!("GET {LATEST} HTTP/1.1\r\nhost: localhost\r\naccept: application/json\r\n{headers}\r\n").into_bytes()
}

/// Requests a second, the server thread's microseconds a request, and the share of the time in which it was at work.
fn measure(address: SocketAddr, request: &[u8], thread: &str) -> [f64; 3] {
    let mut batches = [0, 1].map(|_| {
        let connections = (0..BATCH).map(|_| TcpStream::connect(address).unwrap()).collect::<Vec<_>>();
        connections.iter().for_each(|connection| connection.set_nodelay(true).unwrap());
        connections
    });
    // Every answer is as long as the first: ids and dates are of one length.
    let mut buffer = vec![0; 1 << 20];
    let length = {
        batches[0][0].write_all(request).unwrap();
        read_answer(&mut batches[0][0]).0
    };
    let ask =
        |batch: &mut Vec<TcpStream>| batch.iter_mut().for_each(|connection| connection.write_all(request).unwrap());
    let mut take = |batch: &mut Vec<TcpStream>| {
        batch.iter_mut().for_each(|connection| connection.read_exact(&mut buffer[..length]).unwrap());
        assert!(buffer.starts_with(b"HTTP/1.1 "));
    };
    let (before, begun) = (thread_nanos(thread), Instant::now());
    let mut answered = 0;
    ask(&mut batches[0]);
    while begun.elapsed() < ROUND {
        for (next, last) in [(1, 0), (0, 1)] {
            ask(&mut batches[next]);
            take(&mut batches[last]);
            answered += BATCH;
        }
    }
    take(&mut batches[0]);
    answered += BATCH;
    let (nanos, elapsed) = ((thread_nanos(thread) - before) as f64, begun.elapsed().as_secs_f64());
    [answered as f64 / elapsed, nanos / 1e3 / answered as f64, nanos / 1e9 / elapsed]
}

/// Time on a processor of this process's thread with the name, by the system's own count.
fn thread_nanos(name: &str) -> u64 {
    let nanos = std::fs::read_dir("/proc/self/task").unwrap().filter_map(|task| {
        let path = task.unwrap().path();
        let named = std::fs::read_to_string(path.join("comm")).ok()?.trim() == name;
        let text = std::fs::read_to_string(path.join("schedstat")).ok()?;
        if named { text.split(' ').next()?.parse::<u64>().ok() } else { None }
    });
    nanos.sum()
}

fn send(address: SocketAddr, method: &str, path: &str, body: &str) -> (Vec<(String, String)>, String) {
    let mut connection = TcpStream::connect(address).unwrap();
    let length = body.len();
    let head = format!(
        "{method} {path} HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\ncontent-length: {length}\r\n\r\n"
    );
    connection.write_all((head + body).as_bytes()).unwrap();
    let (_, headers, body) = read_answer(&mut connection);
    (headers, body)
}

/// Length of an answer in all, its headers and its body.
fn read_answer(connection: &mut TcpStream) -> (usize, Vec<(String, String)>, String) {
    let mut bytes = Vec::new();
    loop {
        let mut part = [0; 65536];
        let read = connection.read(&mut part).unwrap();
        assert!(read > 0, "the connection stays open");
        bytes.extend_from_slice(&part[..read]);
        let text = String::from_utf8_lossy(&bytes);
        let Some((head, body)) = text.split_once("\r\n\r\n") else { continue };
        let headers = head.lines().skip(1).filter_map(|line| line.split_once(": "));
        let headers: Vec<_> = headers.map(|(name, value)| (name.to_owned(), value.to_owned())).collect();
        let length = headers.iter().find(|(name, _)| name == "content-length");
        let length = length.map_or(0, |(_, length)| length.parse().unwrap());
        if body.len() >= length {
            return (bytes.len(), headers, body.to_owned());
        }
    }
}

fn value_of<'a>(headers: &'a [(String, String)], name: &str) -> &'a str {
    &headers.iter().find(|(known, _)| known == name).unwrap().1
}

fn median(mut values: Vec<f64>) -> f64 {
    values.sort_by(f64::total_cmp);
    values[values.len() / 2]
}

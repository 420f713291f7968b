//! Clients that send or take too slowly, too much, too many at once, or what is no HTTP: each is met within a bound, and the others are
//! served meanwhile.

use std::io::{ErrorKind, Read, Write};
use std::net::TcpStream;
use std::thread::sleep;
use std::time::{Duration, Instant};

use serde_json::json;
use socket2::SockRef;
use tokio::task::spawn_blocking;

use crate::harness::{Service, changed, fit_body, forecast_body, pairs};

const NETWORK: &str = "/v1/networks/heronsgate";
const SNAPSHOT: &str = "/v1/networks/heronsgate/snapshots/2026-06-01";
const OK: &str = "HTTP/1.1 200";

fn connect(service: &Service) -> TcpStream {
    let stream = TcpStream::connect(service.address()).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(20))).unwrap();
    stream
}

/// A connection whose own side takes little, so that an answer waits at the service's.
fn narrow(service: &Service) -> TcpStream {
    let stream = connect(service);
    SockRef::from(&stream).set_recv_buffer_size(4096).unwrap();
    stream
}

fn send(stream: &mut TcpStream, text: &str) {
    stream.write_all(text.as_bytes()).unwrap();
}

/// All that comes until the other side ends; a reset is an end too.
fn rest(stream: &mut TcpStream) -> String {
    let mut bytes = Vec::new();
    let mut part = [0; 65536];
    loop {
        match stream.read(&mut part) {
            Ok(0) => break,
            Ok(read) => bytes.extend_from_slice(&part[..read]),
            Err(error) if error.kind() == ErrorKind::ConnectionReset => break,
            Err(error) => panic!("{error} after {} bytes", bytes.len()),
        }
    }
    String::from_utf8_lossy(&bytes).into_owned()
}

/// What a request is answered that asks for the end of its connection.
async fn told(service: &Service, request: String) -> String {
    let mut stream = connect(service);
    spawn_blocking(move || {
        // It may be refused before it was sent in full.
        let _ = stream.write_all(request.as_bytes());
        rest(&mut stream)
    })
    .await
    .unwrap()
}

fn get(path: &str) -> String {
    format!("GET {path} HTTP/1.1\r\nhost: localhost\r\n\r\n")
}

fn post(headers: &str) -> String {
    format!("POST /v1/fits HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\n{headers}\r\n")
}

/// A network without a plan, so that nothing is computed, with a snapshot that is answered in about 400 kB.
async fn keep_large_snapshot(service: &Service) {
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let counts: Vec<(u64, u64)> = (0..30_000).map(|degree| (degree, 1_000_000)).collect();
    service.put(SNAPSHOT, &json!({"degree_counts": counts})).await.expect(201);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_reader_who_takes_nothing_or_next_to_nothing_is_let_go() {
    let service = Service::start_with(|config| config.http.answer_pause_seconds = 1).await;
    let document = service.get("/openapi.json").await.text.len();
    let asked = 200;
    let clients = [0, 100].map(|bite| {
        let mut stream = narrow(&service);
        send(&mut stream, &get("/openapi.json").repeat(asked));
        spawn_blocking(move || {
            let (begun, mut taken) = (Instant::now(), 0);
            let mut part = vec![0; bite];
            // Longer than the pause; much longer than an end would take to be seen.
            while begun.elapsed() < Duration::from_secs(4) {
                sleep(Duration::from_millis(100));
                match stream.read(&mut part) {
                    Ok(read) => taken += read,
                    Err(_) => break,
                }
            }
            taken + rest(&mut stream).len()
        })
    });
    for client in clients {
        assert!(client.await.unwrap() < asked * document / 2, "the rest was never sent");
    }
    // Somebody who reads slowly but reads is served to the end.
    let mut stream = connect(&service);
    send(&mut stream, &get("/openapi.json").repeat(19));
    send(&mut stream, &get("/openapi.json").replace("\r\n\r\n", "\r\nconnection: close\r\n\r\n"));
    let taken = spawn_blocking(move || {
        let (mut taken, mut part) = (0, vec![0; 1 << 16]);
        loop {
            match stream.read(&mut part).unwrap() {
                0 => return taken,
                read => taken += read,
            }
            sleep(Duration::from_millis(50));
        }
    });
    assert!(taken.await.unwrap() > 20 * document);
}

#[tokio::test(flavor = "multi_thread")]
async fn answers_that_wait_for_their_readers_take_bounded_memory() {
    let service = Service::start_with(|config| {
        config.http.answers_bytes = 100_000;
        config.http.answer_pause_seconds = 2;
    })
    .await;
    keep_large_snapshot(&service).await;
    let mut stream = narrow(&service);
    send(&mut stream, &get(SNAPSHOT).repeat(100));
    sleep(Duration::from_millis(500));
    let refused = service.get(SNAPSHOT).await.expect_problem(503, "overloaded");
    assert_eq!(refused.header("retry-after"), "1");
    // An answer to a write is not taken back: it waits.
    let begun = Instant::now();
    let body = changed(forecast_body(), "/thresholds", json!((1..200).collect::<Vec<_>>()));
    let answer = service.post("/v1/forecasts", &body).await.expect(201);
    assert!(answer.text.len() > 64 * 1024, "{}", answer.text.len());
    assert!(begun.elapsed() > Duration::from_secs(1), "until the first reader was let go");
    drop(stream);
    service.get(SNAPSHOT).await.expect(200);
}

#[tokio::test(flavor = "multi_thread")]
async fn bodies_that_wait_for_their_ends_take_bounded_memory() {
    let service = Service::start_with(|config| {
        config.http.body_limit_bytes = 1 << 20;
        config.http.bodies_bytes = 2 << 20;
        config.http.body_timeout_seconds = 3;
    })
    .await;
    // One of these fits for certain, and three do not, however the memory of each grows.
    let filler = " ".repeat(900_000);
    let mut streams = ["content-length: 1000000\r\n", "transfer-encoding: chunked\r\n", "content-length: 999999\r\n"]
        .map(|length| {
            let mut stream = connect(&service);
            send(&mut stream, &post(length));
            if length.starts_with('t') {
                send(&mut stream, "f4240\r\n");
            }
            send(&mut stream, &filler);
            sleep(Duration::from_millis(200));
            stream
        });
    let statuses = streams.each_mut().map(|stream| {
        let mut part = [0; 1000];
        let read = stream.read(&mut part).unwrap();
        String::from_utf8_lossy(&part[..read]).split(' ').nth(1).unwrap_or_default().to_owned()
    });
    assert_eq!((statuses[0].as_str(), statuses[2].as_str()), ("408", "503"), "{statuses:?}");
    assert!(["408", "503"].contains(&statuses[1].as_str()), "{statuses:?}");
    let text = format!("{}{}", " ".repeat(900_000), fit_body());
    service.post_text("/v1/fits", text).await.expect(201);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_giant_body_is_refused_before_it_is_read_or_where_it_becomes_one() {
    let service = Service::start_with(|config| config.http.body_limit_bytes = 100_000).await;
    let announced = told(&service, post("content-length: 99999999999999\r\nconnection: close\r\n")).await;
    assert!(announced.contains(" 413 ") && announced.contains("body_too_large"), "{announced}");
    let expecting = post("content-length: 99999999\r\nexpect: 100-continue\r\nconnection: close\r\n");
    let answer = told(&service, expecting).await;
    assert!(answer.starts_with("HTTP/1.1 413"), "nothing is asked for: {answer}");
    let chunks = format!("1000\r\n{}\r\n", " ".repeat(0x1000)).repeat(1000);
    let unannounced = told(&service, post("transfer-encoding: chunked\r\nconnection: close\r\n") + &chunks).await;
    assert!(unannounced.contains(" 413 "), "{unannounced}");
    // A body that is waited for is asked for, and read.
    let body = fit_body().to_string();
    let mut stream = connect(&service);
    send(
        &mut stream,
        &post(&format!("content-length: {}\r\nexpect: 100-continue\r\nconnection: close\r\n", body.len())),
    );
    let answer = spawn_blocking(move || {
        let mut part = [0; 100];
        let read = stream.read(&mut part).unwrap();
        assert!(part[..read].starts_with(b"HTTP/1.1 100"), "{}", String::from_utf8_lossy(&part[..read]));
        send(&mut stream, &body);
        rest(&mut stream)
    });
    assert!(answer.await.unwrap().starts_with("HTTP/1.1 201"));
}

#[tokio::test(flavor = "multi_thread")]
async fn heads_without_measure_and_what_is_no_http_are_refused() {
    let service = Service::start().await;
    let many: String = (0..300).map(|i| format!("x-{i}: 1\r\n")).collect();
    let long = format!("x-long: {}\r\n", "a".repeat(200_000));
    let head = |headers: &str| format!("GET /livez HTTP/1.1\r\nhost: localhost\r\n{headers}connection: close\r\n\r\n");
    for (request, statuses) in [
        (head(&many), "431"),
        (head(&long), "431"),
        (format!("GET /{} HTTP/1.1\r\nhost: localhost\r\n\r\n", "a".repeat(200_000)), "414 431"),
        (head("content-length: 1\r\ncontent-length: 2\r\n"), "400"),
        (head("content-length: -1\r\n"), "400"),
        (head("transfer-encoding: gzip\r\n"), "400"),
        (head("folded: a\r\n b\r\n"), "200 400"),
        (head("nul: a\0b\r\n"), "400"),
        (head("no colon\r\n"), "400"),
        ("GET /livez HTTP/1.1\nhost: it\nconnection: close\n\n".to_owned(), "200 400"),
        ("GET /livez HTTP/1.0\r\n\r\n".to_owned(), "200"),
        ("GET /livez\r\n\r\n".to_owned(), "400"),
        ("PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n".to_owned(), "400 closed"),
        ("GET http://it/livez HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n\r\n".to_owned(), "200"),
        ("OPTIONS * HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n\r\n".to_owned(), "400 404 405"),
        ("CONNECT it:443 HTTP/1.1\r\nhost: it:443\r\nconnection: close\r\n\r\n".to_owned(), "400 404 405"),
        ("\u{16}\u{3}\u{1}\u{2}\u{0}hello over TLS\r\n\r\n".to_owned(), "400"),
    ] {
        let answer = told(&service, request.clone()).await;
        let status = answer.split(' ').nth(1).unwrap_or("closed");
        assert!(statuses.contains(status), "{:.80}: {answer:.200}", request);
    }
    // A chunked body whose length is announced besides goes by its chunks, and what follows it is no second request.
    let body = fit_body().to_string();
    let both = post("content-length: 3\r\ntransfer-encoding: chunked\r\nconnection: close\r\n");
    let answer = told(&service, format!("{both}{:x}\r\n{body}\r\n0\r\n\r\n{}", body.len(), get("/livez"))).await;
    assert_eq!(answer.matches("HTTP/1.1 ").count(), 1, "{answer:.300}");
}

#[tokio::test(flavor = "multi_thread")]
async fn requests_sent_ahead_are_answered_in_their_order() {
    let service = Service::start().await;
    let paths = ["/livez", "/v1/nothing", "/readyz", "/v1/forecasts"];
    let mut requests: String = (0..100).map(|i| get(paths[i % 4])).collect();
    requests.push_str("GET /livez HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n\r\n");
    let answers = told(&service, requests).await;
    let statuses: Vec<&str> = answers.split("HTTP/1.1 ").skip(1).map(|answer| &answer[..3]).collect();
    let expected: Vec<&str> = (0..101).map(|i| if i % 4 == 1 { "404" } else { "200" }).collect();
    assert_eq!(statuses, expected);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_flood_of_connections_closes_those_that_rest() {
    let service = Service::start_with(|config| config.http.max_connections = 8).await;
    let flood: Vec<TcpStream> = (0..60)
        .map(|i| {
            let mut stream = connect(&service);
            // Some have begun a head that never ends.
            if i % 2 == 0 {
                send(&mut stream, "GET /livez HTTP/1.1\r\nx: ");
            }
            stream
        })
        .collect();
    for _ in 0..3 {
        service.get("/v1/forecasts").await.expect(200);
    }
    let open = flood.iter().filter(|stream| is_open(stream)).count();
    assert!(open <= 8, "{open} of 60 are open");
}

#[tokio::test(flavor = "multi_thread")]
async fn when_every_connection_is_at_work_others_are_told_and_probes_answered() {
    let service = Service::start_with(|config| config.http.max_connections = 2).await;
    let begun = post("content-length: 100\r\n") + "{";
    let at_work = [(); 2].map(|()| {
        let mut stream = connect(&service);
        send(&mut stream, &begun);
        stream
    });
    sleep(Duration::from_millis(300));
    for _ in 0..3 {
        let refused = service.get("/v1/forecasts").await.expect_problem(503, "overloaded");
        assert_eq!((refused.header("retry-after"), refused.header("connection")), ("1", "close"));
        for path in ["/livez", "/readyz", "/metrics"] {
            service.get(path).await.expect(200);
        }
    }
    assert!(at_work.iter().all(is_open), "and they are left to work");
    // Those who say nothing give way to those who ask, at once.
    let silent: Vec<TcpStream> = (0..200).map(|_| connect(&service)).collect();
    for _ in 0..3 {
        service.get("/livez").await.expect(200);
    }
    drop((silent, at_work));
    sleep(Duration::from_millis(300));
    service.get("/v1/forecasts").await.expect(200);
}

/// Lists under way take no place of other writes, have few of their own and one a network, and must keep coming.
#[tokio::test(flavor = "multi_thread")]
async fn link_lists_that_trickle_keep_nobody_out() {
    let service = Service::start_with(|config| {
        config.http.max_in_flight = 2;
        config.http.body_timeout_seconds = 3;
        (config.jobs.workers, config.jobs.queue) = (1, 2);
    })
    .await;
    for network in ["a", "b", "c", "d"] {
        service.put(&format!("/v1/networks/{network}"), &json!({"degree_kind": "received"})).await.expect(201);
    }
    let begin = |network: &str| {
        let mut stream = connect(&service);
        let head = "host: localhost\r\ncontent-type: text/csv\r\ncontent-length: 1000000\r\nconnection: close\r\n\r\n";
        send(&mut stream, &format!("PUT /v1/networks/{network}/links HTTP/1.1\r\n{head}"));
        sleep(Duration::from_millis(200));
        stream
    };
    let mut trickling = ["a", "b", "c"].map(begin);
    let mut again = begin("a");
    let mut fourth = begin("d");
    for refused in [&mut again, &mut fourth] {
        assert!(rest(refused).starts_with("HTTP/1.1 503"));
    }
    for _ in 0..3 {
        service.post("/v1/fits", &fit_body()).await.expect(201);
        trickling.iter_mut().for_each(|stream| send(stream, "t"));
        sleep(Duration::from_secs(1));
    }
    for stream in &mut trickling {
        assert!(rest(stream).starts_with("HTTP/1.1 408"), "a byte now and then is too little");
    }
    let list = ("text/csv", "time,source,target\n1,x,y\n2,y,x\n".to_owned());
    service.put_with("/v1/networks/a/links", list, &[]).await.expect(200);
}

fn is_open(mut stream: &TcpStream) -> bool {
    stream.set_nonblocking(true).unwrap();
    matches!(stream.read(&mut [0; 100]), Err(error) if error.kind() == ErrorKind::WouldBlock)
}

/// The same in a body that is not read whole before it is refused: each kind of excess, as large as a body may be.
#[tokio::test(flavor = "multi_thread")]
async fn a_body_full_of_names_depth_or_one_text_is_refused_in_few_words() {
    let service = Service::start().await;
    let many: String = (0..1_000_000).map(|i| format!("\"k{i}\":1,")).collect();
    let digits = "9".repeat(1_000_000);
    let text = "\\u00e9".repeat(500_000);
    let deep = format!("{}{}", "[".repeat(1_000_000), "]".repeat(1_000_000));
    let bodies = [
        format!("{{{many}\"seed\":1}}"),
        format!("{{\"arrivals\":{{{many}\"per_day\":1}}}}"),
        format!("{{\"{text}\":1}}"),
        format!("{{\"seed\":{digits}}}"),
        format!("{{\"seed\":1e{digits}}}"),
        format!("{{\"model\":\"{text}\",\"label\":\"{text}\",\"degree_kind\":\"{text}\"}}"),
        format!("{{\"snapshots\":[{{\"as_of\":\"{text}\",\"degree_counts\":{deep}}}]}}"),
        format!("{{\"watch\":{{\"nodes\":[{{\"name\":\"{text}\",\"degree\":\"{text}\"}}]}}}}"),
        format!("{{\"horizon\":{{\"until\":\"{text}\",\"every\":\"{text}\"}},\"dates\":[\"{text}\"]}}"),
        format!("{{\"arrivals\":{{\"csv\":\"from,per_day\\n{text}\",\"weeks\":{{\"{text}\":1}}}}}}"),
        format!("{{\"fixed\":{{\"{text}\":{digits}}},\"thresholds\":[{digits},-{digits},0.{digits}]}}"),
        deep,
    ];
    for body in bodies {
        let begun = format!("{body:.60}");
        let started = Instant::now();
        let answer = service.post_text("/v1/forecasts", body).await.expect(400);
        assert!(answer.text.len() < 64 * 1024, "{begun}: answered in {} bytes", answer.text.len());
        // Measured at 0.1 to 0.5 s, unoptimised: what grows with the square of a body would take minutes.
        assert!(started.elapsed() < Duration::from_secs(10), "{begun}: {:?}", started.elapsed());
    }
    let rows = "1,".repeat(500_000);
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let table = service.put_with(SNAPSHOT, ("text/csv", format!("degree,nodes\n{rows}\n")), &[]).await.expect(400);
    assert!(table.text.len() < 64 * 1024, "{}", table.text.len());
    let answer = service.get(&format!("/v1/forecasts?label={}", "%41".repeat(15_000))).await;
    assert!(answer.status < 500 && answer.text.len() < 64 * 1024, "{}", answer.status);
}

/// Compressed bodies are read where a link list is taken and nowhere else, whatever the body is.
#[tokio::test(flavor = "multi_thread")]
async fn compressed_bodies_are_refused_but_for_link_lists() {
    let service = Service::start().await;
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let counts = json!({"degree_counts": pairs(&crate::harness::COUNTS[0])});
    let limit = json!({"threshold": 5, "max_nodes": 10, "by": "2027-01-01"});
    for (path, body) in [
        (NETWORK.to_owned(), json!({"degree_kind": "received"})),
        (SNAPSHOT.to_owned(), counts),
        (format!("{NETWORK}/transitions/2026-05-01/2026-06-01"), json!({"counts": [[0, 1, 1]]})),
        (format!("{NETWORK}/link-events"), json!({})),
        (format!("{NETWORK}/limits/a"), limit),
        (format!("{NETWORK}/scenarios/a"), json!({})),
    ] {
        for encoding in ["gzip", "deflate", "br", "zstd", "gzip, gzip"] {
            let headers = [("content-encoding", encoding)];
            let answer = service.put_with(&path, ("application/json", body.to_string()), &headers).await;
            answer.expect_problem(415, "unsupported_encoding");
        }
    }
    for encoding in ["deflate", "gzip, gzip", "br"] {
        let headers = [("content-encoding", encoding)];
        let list = ("text/csv", "time,source,target\n".to_owned());
        service.put_with(&format!("{NETWORK}/links"), list, &headers).await.expect_problem(415, "unsupported_encoding");
    }
    assert!(told(&service, get("/livez").replace("\r\n\r\n", "\r\nconnection: close\r\n\r\n")).await.starts_with(OK));
}

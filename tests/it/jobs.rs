//! Link lists, and the jobs that count them.

use std::fmt::Write as _;
use std::io::{Read as _, Write as _};
use std::ops::ControlFlow;
use std::time::{Duration, Instant};

use flate2::Compression;
use flate2::write::GzEncoder;
use reqwest::Method;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};
use tailcast::ingest::{FaultPolicy, LinkListPlan, count_links};
use tailcast::model::{DegreeKind, LinkEvents};

use crate::harness::{Answer, Service, answered, json_text, pairs};
use crate::process::{command, serve};

const LINKS: &str = "/v1/networks/h/links";

/// A growing network's links as CSV: one newcomer an hour, linked to somebody before it, now and then two.
pub fn link_list(links: u64) -> String {
    let mut text = "time,source,target\n".to_owned();
    let mut random = 7u64;
    for link in 0..links {
        random = random.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        let (source, target) = (link + 1, (random >> 33) % (link + 1));
        let _ = writeln!(text, "{},n{source},n{target}", 1_767_225_600 + 3_600 * link);
    }
    text
}

fn gzip(text: &str) -> Vec<u8> {
    let mut encoder = GzEncoder::new(Vec::new(), Compression::fast());
    encoder.write_all(text.as_bytes()).unwrap();
    encoder.finish().unwrap()
}

/// A service that tracks the networks h and i.
async fn tracking_with(change: impl FnOnce(&mut tailcast::config::Config)) -> Service {
    let service = Service::start_with(change).await;
    for name in ["h", "i"] {
        service.put(&format!("/v1/networks/{name}"), &json!({"degree_kind": "received"})).await.expect(201);
    }
    service
}

async fn tracking() -> Service {
    tracking_with(|_| {}).await
}

async fn send(service: &Service, path: &str, list: impl Into<reqwest::Body>, headers: &[(&str, &str)]) -> Answer {
    let request = service.request(Method::PUT, path).body(list);
    let typed = headers.iter().any(|(name, _)| *name == "content-type");
    let request = if typed { request } else { request.header("content-type", "text/csv") };
    answered(headers.iter().fold(request, |request, &(name, value)| request.header(name, value))).await
}

/// Sends a list whose counting takes seconds, for it is cut into many periods; returns the job's address.
async fn long_job(service: &Service, network: &str) -> String {
    let path = format!("/v1/networks/{network}/links?every=P20D");
    let answer = send(service, &path, link_list(400_000), &[("prefer", "respond-async")]).await.expect(202);
    answer.header("location").to_owned()
}

/// A job when it has ended.
pub async fn ended(service: &Service, location: &str) -> Value {
    let begun = Instant::now();
    loop {
        let job = service.get(location).await.expect(200).json();
        if !is_live(&job) {
            return job;
        }
        assert!(begun.elapsed() < Duration::from_secs(180), "{job}");
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
}

/// Whether a job is still to end.
pub fn is_live(job: &Value) -> bool {
    ["waiting", "running"].contains(&job["state"].as_str().unwrap())
}

/// Files that jobs have left.
fn spooled(folder: &std::path::Path) -> usize {
    std::fs::read_dir(folder).map_or(0, |entries| entries.count())
}

#[tokio::test]
async fn a_short_list_is_answered_when_what_it_tells_is_stored() {
    let service = tracking().await;
    service.put("/v1/networks/h/snapshots/2020-01-01", &json!({"degree_counts": [[0, 1]]})).await.expect(201);
    let list = link_list(3_000);
    let job = send(&service, &format!("{LINKS}?every=P1M"), list.clone(), &[]).await.expect(200).json();
    assert_eq!((&job["state"], &job["progress"], &job["problem"]), (&json!("succeeded"), &json!(1.0), &Value::Null));
    let plan = LinkListPlan {
        kind: DegreeKind::Received,
        every: Some("P1M".parse().unwrap()),
        faults: FaultPolicy::Refuse,
        link_events: true,
    };
    let (tally, report) = count_links(list.as_bytes(), &plan, &mut |_| ControlFlow::Continue(())).unwrap();
    let result = &job["result"];
    let newest = tally.snapshots.last().unwrap();
    assert_eq!(
        [&result["links"], &result["nodes"], &result["snapshots"], &result["transitions"], &result["landings"]],
        [
            &json!(report.links),
            &json!(newest.counts.nodes()),
            &json!(tally.snapshots.len()),
            &json!(tally.transitions.len()),
            &json!(tally.link_events.as_ref().map_or(0, LinkEvents::landings))
        ]
    );
    let stored = service.get("/v1/networks/h/snapshots").await.expect(200).json();
    let stored = stored["items"].as_array().unwrap();
    assert_eq!(stored.len(), tally.snapshots.len(), "what was stored before is gone");
    for (line, snapshot) in stored.iter().zip(&tally.snapshots) {
        let address = format!("/v1/networks/h/snapshots/{}", line["as_of"].as_str().unwrap());
        let counts = service.get(&address).await.expect(200).json()["degree_counts"].clone();
        assert_eq!(counts, pairs(&snapshot.counts), "{address}");
    }
    let tables = service.get("/v1/networks/h/transitions").await.expect(200).json();
    assert_eq!(tables["items"].as_array().unwrap().len(), tally.transitions.len());
    let events = service.get("/v1/networks/h/link-events").await.expect(200).json();
    assert_eq!(events["ratios"].as_array().unwrap().len(), tally.link_events.unwrap().ratios().len());
    // A run from all of it.
    let run = service.post("/v1/networks/h/fits", &json!({"fixed": {"preferential_share": 0.1}})).await.expect(201);
    assert_eq!(run.json()["network"], "h");
}

#[tokio::test]
async fn a_list_may_be_compressed_and_be_json_lines() {
    let service = tracking().await;
    let list = link_list(500);
    let plain = send(&service, LINKS, list.clone(), &[]).await.expect(200).json();
    let snapshot =
        async || service.get("/v1/networks/h/snapshots").await.expect(200).json()["items"][0]["etag"].clone();
    let expected = snapshot().await;
    let packed = send(&service, LINKS, gzip(&list), &[("content-encoding", "gzip")]).await.expect(200).json();
    assert_eq!(packed["result"], plain["result"]);
    let lines: String = list
        .lines()
        .skip(1)
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            format!("{}\n", json!({"time": cells[0].parse::<u64>().unwrap(), "source": cells[1], "target": cells[2]}))
        })
        .collect();
    let ndjson = send(&service, LINKS, lines, &[("content-type", "application/x-ndjson")]).await.expect(200).json();
    assert_eq!(ndjson["result"], plain["result"]);
    assert_eq!(snapshot().await, expected);
}

#[tokio::test]
async fn a_job_is_followed_by_reading_it_again_or_by_its_events() {
    let service = tracking().await;
    let sent = send(&service, &format!("{LINKS}?every=P20D"), link_list(400_000), &[("prefer", "respond-async")]).await;
    let sent = sent.expect(202);
    assert_eq!(sent.header("preference-applied"), "respond-async");
    let location = sent.header("location").to_owned();
    assert_eq!(location, format!("/v1/jobs/{}", sent.json()["id"].as_str().unwrap()));
    let events = service.get_with(&location, "accept", "text/event-stream").await.expect(200);
    let told: Vec<Value> = events
        .text
        .lines()
        .filter_map(|line| line.strip_prefix("data: "))
        .map(|data| serde_json::from_str(data).unwrap())
        .collect();
    let progress: Vec<f64> = told.iter().map(|job| job["progress"].as_f64().unwrap()).collect();
    assert!(progress.len() >= 3 && progress.is_sorted(), "{progress:?}");
    assert!(
        progress.iter().all(|at| (0.0..=1.0).contains(at)) && progress.iter().any(|at| (0.1..0.9).contains(at)),
        "{progress:?}"
    );
    assert_eq!(told.last().unwrap()["state"], "succeeded");
    assert!(events.text.contains("id: end"), "{}", events.text);
    let read = service.get(&location).await.expect(200);
    assert_eq!(&read.json(), told.last().unwrap());
    service.get_with(&location, "if-none-match", read.header("etag")).await.expect(304);
    service.get_with(&location, "accept", "text/csv").await.expect_problem(406, "not_acceptable");
    let again = service.request(Method::GET, &location).header("accept", "text/event-stream");
    answered(again.header("last-event-id", "end")).await.expect(204);
    service.send(Method::DELETE, &location).await.expect(204);
    service.get(&location).await.expect_problem(404, "not_found");
}

/// What `tailcast follow` says of a job of the service, and whether all was well.
async fn followed(service: &Service, job: &str) -> (bool, String, String) {
    let (bind, job) = (service.address().to_string(), job.to_owned());
    let follow = move || {
        let folder = tempfile::tempdir().unwrap();
        let mut follow = command(folder.path());
        follow.args(["follow", &job]).env("TAILCAST_BIND", bind).output().unwrap()
    };
    let output = tokio::task::spawn_blocking(follow).await.unwrap();
    let text = |bytes: &[u8]| String::from_utf8(bytes.to_vec()).unwrap();
    (output.status.success(), text(&output.stdout), text(&output.stderr))
}

#[tokio::test]
async fn the_command_line_follows_a_job_to_its_end() {
    let service = tracking().await;
    let location = long_job(&service, "h").await;
    let (done, result, told) = followed(&service, &location).await;
    assert!(done, "{told}");
    let result: Value = serde_json::from_str(&result).unwrap();
    assert_eq!(result, service.get(&location).await.expect(200).json()["result"]);
    let location = long_job(&service, "h").await;
    let following = followed(&service, location.rsplit('/').next().unwrap());
    let called_off = async {
        tokio::time::sleep(Duration::from_millis(300)).await;
        service.send(Method::DELETE, &location).await.expect(204);
    };
    let ((done, result, told), ()) = tokio::join!(following, called_off);
    assert!(!done && result.is_empty() && told.contains("called off"), "{told}");
    let (done, _, told) = followed(&service, "/v1/jobs/01234567-89ab-7def-8123-456789abcdef").await;
    assert!(!done && told.contains("not_found"), "{told}");
}

#[tokio::test]
async fn a_list_with_faults_is_refused_or_counted_without_them() {
    let service = tracking().await;
    service.put("/v1/networks/h/snapshots/2026-06-01", &json!({"degree_counts": [[0, 7]]})).await.expect(201);
    let list = "time,source,target\n2026-01-01,a,b\n2026-01-02,c,c\nsoon,c,b\n2026-01-02,d,b\n2026-01-02,d,b\n2026-01-01,c,b\n";
    let refused = send(&service, LINKS, list, &[]).await.expect_problem(400, "invalid_request");
    assert_eq!(refused.places(), ["line 3"]);
    assert!(refused.text.contains("faults=skip"), "{}", refused.text);
    let kept = service.get("/v1/networks/h/snapshots").await.expect(200).json();
    assert_eq!(kept["items"][0]["nodes"], 7, "what is stored stays");
    let jobs = service.get("/v1/jobs?network=h").await.expect(200).json();
    assert_eq!((&jobs["items"][0]["state"], &jobs["items"][0]["progress"]), (&json!("failed"), &Value::Null));
    assert_eq!(jobs["items"][0]["problem"]["errors"][0]["line"], 3);
    let counted = send(&service, &format!("{LINKS}?faults=skip"), list, &[]).await.expect(200).json();
    let skipped = &counted["result"]["skipped"];
    let counts = ["out_of_order", "repeated", "self_links", "malformed"].map(|kind| skipped[kind]["count"].clone());
    assert_eq!(counts, [1, 1, 1, 1].map(|count| json!(count)));
    assert_eq!((&counted["result"]["links"], &skipped["malformed"]["first"][0]["line"]), (&json!(2), &json!(4)));
}

#[tokio::test(flavor = "multi_thread")]
async fn what_is_no_link_list_is_refused() {
    let service = tracking_with(|config| config.jobs.link_list_bytes = 20_000).await;
    for (query, parameter) in
        [("every=monthly", "every"), ("every=P0D", "every"), ("faults=ignore", "faults"), ("evry=P1M", "evry")]
    {
        let answer = send(&service, &format!("{LINKS}?{query}"), "", &[]).await.expect_problem(400, "invalid_request");
        assert_eq!(answer.places(), [parameter]);
    }
    let at_once = "time,source,target\n2000-01-01,a,b\n2020-01-01,c,b\n";
    let answer =
        send(&service, &format!("{LINKS}?every=PT1M"), at_once, &[]).await.expect_problem(400, "invalid_request");
    assert_eq!(answer.places(), ["every"]);
    let whole = gzip(&link_list(100));
    for (list, words) in [
        (Vec::new(), "line"),
        (b"time,source,target\n".to_vec(), "no link"),
        (b"when,who,whom\n1,a,b\n".to_vec(), "time"),
        (b"\x00\x01\x02\xff".to_vec(), "line"),
        (b"{\"time\": 1, \"source\": \"a\"}\n".to_vec(), "target"),
        (whole[..whole.len() / 2].to_vec(), "gzip"),
    ] {
        let answer = send(&service, LINKS, list.clone(), &[]).await.expect_problem(400, "invalid_request");
        assert!(answer.text.contains(words), "{list:?}: {}", answer.text);
    }
    send(&service, LINKS, "", &[("content-type", "application/json")])
        .await
        .expect_problem(415, "unsupported_media_type");
    for encoding in ["br", "gzip, gzip"] {
        let answer = send(&service, LINKS, "", &[("content-encoding", encoding)]).await;
        assert_eq!(answer.expect_problem(415, "unsupported_encoding").header("accept-encoding"), "gzip, identity");
    }
    let large = link_list(2_000);
    let announced = send(&service, LINKS, large.clone(), &[]).await.expect_problem(413, "body_too_large");
    assert!(announced.text.contains("link_list_bytes"), "{}", announced.text);
    let mut chunked = std::net::TcpStream::connect(service.address()).unwrap();
    let head = "HTTP/1.1\r\nHost: localhost\r\nContent-Type: text/csv\r\nTransfer-Encoding: chunked\r\n\r\n";
    // In one piece: the service closes as soon as it has seen enough.
    chunked.write_all(format!("PUT {LINKS} {head}{:x}\r\n{large}\r\n", large.len()).as_bytes()).unwrap();
    let mut answer = [0; 4096];
    let read = chunked.read(&mut answer).unwrap();
    assert!(String::from_utf8_lossy(&answer[..read]).starts_with("HTTP/1.1 413"), "the length was not announced");
    send(&service, "/v1/networks/nowhere/links", "", &[]).await.expect_problem(404, "not_found");
    for path in ["/v1/jobs/none", "/v1/jobs/01a231cd-6fbd-74cb-ab23-3d832b2bafba"] {
        service.get(path).await.expect_problem(404, "not_found");
        service.send(Method::DELETE, path).await.expect_problem(404, "not_found");
    }
    for query in ["limit=0", "cursor=x", "state=done"] {
        service.get(&format!("/v1/jobs?{query}")).await.expect_problem(400, "invalid_request");
    }
    let jobs = service.get("/v1/jobs?limit=200").await.expect(200).json();
    assert!(jobs["items"].as_array().unwrap().iter().all(|job| job["state"] == "failed"), "{jobs}");
}

#[tokio::test]
async fn lists_beyond_what_is_configured_change_nothing() {
    let service = tracking_with(|config| {
        config.jobs.link_list_nodes = 2_000;
        config.limits.network_rows = 100;
    })
    .await;
    // More nodes than fit one block of bytes are needed to be seen in time.
    let answer = send(&service, LINKS, link_list(50_000), &[]).await.expect_problem(413, "body_too_large");
    assert!(answer.text.contains("link_list_nodes"), "{}", answer.text);
    let answer = send(&service, &format!("{LINKS}?every=P1D"), link_list(1_000), &[]).await;
    let answer = answer.expect_problem(409, "network_full");
    assert!(answer.text.contains("longer period"), "{}", answer.text);
    assert_eq!(service.get("/v1/networks/h/snapshots").await.expect(200).json()["items"], json!([]));
}

#[tokio::test]
async fn a_network_has_one_job_and_the_queue_an_end() {
    let service = tracking_with(|config| config.jobs.queue = 1).await;
    service.put("/v1/networks/j", &json!({"degree_kind": "received"})).await.expect(201);
    let first = long_job(&service, "h").await;
    let answer = send(&service, LINKS, link_list(10), &[]).await.expect_problem(409, "job_live");
    assert!(answer.text.contains(&first), "it says which: {}", answer.text);
    let second =
        send(&service, "/v1/networks/i/links", link_list(10), &[("prefer", "respond-async")]).await.expect(202);
    assert_eq!(second.json()["state"], "waiting");
    let full = send(&service, "/v1/networks/j/links", link_list(10), &[]).await.expect_problem(503, "overloaded");
    assert!(!full.header("retry-after").is_empty());
    // A job that waits is called off at once, the one at work at its next step.
    service.send(Method::DELETE, second.header("location")).await.expect(204);
    assert_eq!(service.get(second.header("location")).await.expect(200).json()["state"], "cancelled");
    service.send(Method::DELETE, &first).await.expect(204);
    let job = service.get(&first).await.expect(200).json();
    assert_eq!((&job["state"], &job["result"]), (&json!("cancelled"), &Value::Null));
    assert_eq!(service.get("/v1/networks/h/snapshots").await.expect(200).json()["items"], json!([]));
    send(&service, LINKS, link_list(10), &[]).await.expect(200);
    let pages = service.get("/v1/jobs?limit=2").await.expect(200);
    assert_eq!(pages.json()["items"][0]["state"], "succeeded", "newest first");
    let next = pages.header("link").strip_prefix('<').unwrap().strip_suffix(">; rel=\"next\"").unwrap().to_owned();
    assert_eq!(service.get(&next).await.expect(200).json()["items"][0]["id"], job["id"]);
}

#[tokio::test]
async fn a_request_that_waits_for_its_job_learns_that_it_was_called_off() {
    let service = tracking().await;
    let waiting = async { send(&service, &format!("{LINKS}?every=P20D"), link_list(400_000), &[]).await };
    let calling_off = async {
        loop {
            let jobs = service.get("/v1/jobs?network=h").await.expect(200).json();
            if let Some(id) = jobs["items"][0]["id"].as_str() {
                return service.send(Method::DELETE, &format!("/v1/jobs/{id}")).await.expect(204);
            }
            tokio::time::sleep(Duration::from_millis(5)).await;
        }
    };
    let (answer, _) = tokio::join!(waiting, calling_off);
    answer.expect_problem(409, "job_cancelled");
}

#[tokio::test]
async fn a_job_goes_with_its_network() {
    let service = tracking().await;
    let location = long_job(&service, "h").await;
    service.send(Method::DELETE, "/v1/networks/h").await.expect(204);
    assert_eq!(service.get(&location).await.expect(200).json()["state"], "cancelled");
    service.put("/v1/networks/h", &json!({"degree_kind": "total"})).await.expect(201);
    send(&service, LINKS, link_list(10), &[]).await.expect(200);
    let snapshots = service.get("/v1/networks/h/snapshots").await.expect(200).json();
    assert_eq!(snapshots["items"][0]["nodes"], 11, "nothing of the old job came through");
}

#[tokio::test]
async fn degrees_that_count_something_else_by_now_are_not_stored() {
    let service = tracking().await;
    let location = long_job(&service, "h").await;
    service.put("/v1/networks/h", &json!({"degree_kind": "total"})).await.expect(200);
    let job = ended(&service, &location).await;
    assert_eq!((&job["state"], &job["problem"]["code"]), (&json!("failed"), &json!("degree_kind_fixed")));
    assert_eq!(service.get("/v1/networks/h/snapshots").await.expect(200).json()["items"], json!([]));
}

/// A job whose process is killed is counted by the next, and leaves no file behind.
#[tokio::test(flavor = "multi_thread")]
async fn a_job_lives_through_a_kill() {
    let folder = tempfile::tempdir().unwrap();
    let client = reqwest::Client::builder().no_proxy().build().unwrap();
    let served = serve(folder.path());
    let base = format!("http://{}", served.address);
    let settings = json_text(&json!({"degree_kind": "received"}));
    let made = client.put(format!("{base}/v1/networks/h")).header("content-type", settings.0).body(settings.1);
    assert!(made.send().await.unwrap().status().is_success());
    let request = client.put(format!("{base}{LINKS}?every=P20D")).header("content-type", "text/csv");
    let taken = request.header("prefer", "respond-async").body(link_list(400_000)).send().await.unwrap();
    assert_eq!(taken.status().as_u16(), 202);
    let location = taken.headers()["location"].to_str().unwrap().to_owned();
    served.kill();
    let spool = folder.path().join("tailcast.db-jobs");
    assert_eq!(spooled(&spool), 1);
    let url = format!("sqlite://{}", folder.path().join("tailcast.db").display());
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    let state: String = sqlx::query_scalar("SELECT state FROM jobs").fetch_one(&mut database).await.unwrap();
    assert!(["waiting", "running"].contains(&state.as_str()), "it had not ended: {state}");
    database.close().await.unwrap();
    let served = serve(folder.path());
    let base = format!("http://{}", served.address);
    let begun = Instant::now();
    let job = loop {
        let job: Value = client.get(format!("{base}{location}")).send().await.unwrap().json().await.unwrap();
        if job["state"] == "succeeded" {
            break job;
        }
        assert!(["waiting", "running"].contains(&job["state"].as_str().unwrap()), "{job}");
        assert!(begun.elapsed() < Duration::from_secs(180), "{job}");
        tokio::time::sleep(Duration::from_millis(50)).await;
    };
    assert_eq!(job["result"]["links"], 400_000);
    let list: Value =
        client.get(format!("{base}/v1/networks/h/snapshots?limit=1")).send().await.unwrap().json().await.unwrap();
    assert_eq!(list["items"].as_array().unwrap().len(), 1);
    assert_eq!(spooled(&spool), 0);
}

/// A job that the process does not live through is given up after a few times.
#[tokio::test]
async fn a_job_that_stops_the_process_each_time_is_given_up() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("jobs.db").display());
    let id = "01a231cd-6fbd-74cb-ab23-3d832b2bafba";
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    service.put("/v1/networks/h", &json!({"degree_kind": "received"})).await.expect(201);
    service.stop().await;
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    let task = json!({"degree_kind": "received", "every": null, "skip_faults": false, "bytes": 9}).to_string();
    sqlx::query(
        "INSERT INTO jobs (id, kind, network, state, starts, created_at, task) \
         VALUES ($1, 'link_list', 'h', 'running', 3, 0, $2)",
    )
    .bind(id)
    .bind(task)
    .execute(&mut database)
    .await
    .unwrap();
    let spool = folder.path().join("jobs.db-jobs");
    std::fs::create_dir(&spool).unwrap();
    std::fs::write(spool.join(format!("{id}.links")), "time,source,target\n1,a,b\n").unwrap();
    database.close().await.unwrap();
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    let job = ended(&service, &format!("/v1/jobs/{id}")).await;
    assert_eq!((&job["state"], &job["problem"]["code"]), (&json!("failed"), &json!("interrupted")));
    assert!(job["problem"]["detail"].as_str().unwrap().contains("stopped 3 times"), "{job}");
    assert_eq!(spooled(&spool), 0);
}

/// A list that somebody removed cannot be counted, and the network takes another.
#[tokio::test]
async fn a_job_without_its_list_fails() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("jobs.db").display());
    let service = tracking_with(|config| config.database.url = url.clone()).await;
    let at_work = long_job(&service, "i").await;
    let waiting = send(&service, LINKS, link_list(10), &[("prefer", "respond-async")]).await.expect(202);
    let (location, id) = (waiting.header("location"), waiting.json()["id"].as_str().unwrap().to_owned());
    std::fs::remove_file(folder.path().join(format!("jobs.db-jobs/{id}.links"))).unwrap();
    service.send(Method::DELETE, &at_work).await.expect(204);
    let job = ended(&service, location).await;
    assert_eq!((&job["state"], &job["problem"]["code"]), (&json!("failed"), &json!("list_missing")));
    send(&service, LINKS, link_list(10), &[]).await.expect(200);
}

/// A stop in good order leaves the job at work to the next process.
#[tokio::test(flavor = "multi_thread")]
async fn a_stop_in_good_order_leaves_the_job_to_the_next_process() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("jobs.db").display());
    let service = tracking_with(|config| config.database.url = url.clone()).await;
    let location = long_job(&service, "h").await;
    let begun = Instant::now();
    service.stop().await;
    assert!(begun.elapsed() < Duration::from_secs(5), "{:?}", begun.elapsed());
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    assert_eq!(ended(&service, &location).await["state"], "succeeded");
}

//! What becomes of the service when its database cannot be used as it should: each fault has its word at /readyz, writes are refused
//! and never acknowledged in vain, reads go on where they can, and what is mended serves again without a restart where it can.

use std::path::Path;
use std::process::Command;
use std::time::{Duration, Instant};

use reqwest::{Client, Method, Response};
use serde_json::{Value, json};
use sqlx::{Connection, Executor, SqliteConnection};

use crate::harness::{Service, changed, fit_body};
use crate::notice_receiver::Receiver;
use crate::notices::sends;
use crate::process::{Served, command, run, serve, serve_with};

/// A file system of its own size, mounted where only this test looks; needs the rights to mount, as CI has.
struct Mounted<'a>(&'a Path);

impl<'a> Mounted<'a> {
    fn new(folder: &'a Path, size: &str) -> Self {
        done(Command::new("mount").args(["-t", "tmpfs", "-o", &format!("size={size}"), "tmpfs"]).arg(folder));
        Self(folder)
    }

    fn remount(&self, how: &str) {
        done(Command::new("mount").args(["-o", &format!("remount,{how}")]).arg(self.0));
    }
}

impl Drop for Mounted<'_> {
    fn drop(&mut self) {
        let _ = Command::new("umount").arg("-l").arg(self.0).status();
    }
}

#[track_caller]
fn done(command: &mut Command) {
    let output = command.output().unwrap();
    assert!(output.status.success(), "{command:?}: {}", String::from_utf8_lossy(&output.stderr));
}

/// A client of the binary.
struct Caller(Client, String);

impl Caller {
    fn of(served: &Served) -> Self {
        Self(Client::builder().no_proxy().build().unwrap(), format!("http://{}", served.address))
    }

    async fn send(&self, method: Method, path: &str, body: Option<&Value>) -> Response {
        let request = self.0.request(method, format!("{}{path}", self.1));
        body.into_iter().fold(request, |request, body| request.json(body)).send().await.unwrap()
    }

    async fn get(&self, path: &str) -> Response {
        self.send(Method::GET, path, None).await
    }

    async fn post(&self) -> Response {
        let body = changed(fit_body(), "/fixed", json!({"preferential_share": 0.7}));
        self.send(Method::POST, "/v1/fits", Some(&body)).await
    }

    /// Keeps a run; its place and its bytes.
    async fn keep(&self) -> (String, String) {
        let response = self.post().await;
        assert_eq!(response.status().as_u16(), 201);
        let place = response.headers()["location"].to_str().unwrap().to_owned();
        (place, response.text().await.unwrap())
    }

    async fn is_kept(&self, (place, text): &(String, String)) {
        let read = self.get(place).await;
        assert_eq!((read.status().as_u16(), read.text().await.unwrap().as_str()), (200, text.as_str()), "{place}");
    }
}

async fn code(response: Response) -> (u16, String) {
    let status = response.status().as_u16();
    assert!(status != 503 || response.headers().contains_key("retry-after"));
    let text = response.text().await.unwrap();
    let problem: Value = serde_json::from_str(&text).unwrap_or_default();
    (status, problem["code"].as_str().unwrap_or(&text).to_owned())
}

fn is(status: u16, word: &str) -> (u16, String) {
    (status, word.to_owned())
}

/// What the service says that does not start on the database in `folder`.
fn refusal(folder: &Path) -> String {
    let mut command = command(folder);
    command.arg("serve").env("TAILCAST_BIND", "127.0.0.1:0").env("TAILCAST_DATABASE_BUSY_TIMEOUT_MS", "200");
    let output = run(command, "");
    assert!(!output.status.success());
    String::from_utf8_lossy(&output.stderr).into_owned()
}

fn spoil(path: &Path) {
    let mut bytes = std::fs::read(path).unwrap();
    let middle = bytes.len() / 2;
    bytes[middle - 8000..middle + 8000].fill(0xA5);
    std::fs::write(path, bytes).unwrap();
}

/// Spoils the page that holds the beginning of a run's document.
fn spoil_page_of(path: &Path, run: &str) {
    const PAGE: usize = 4096;
    let mut bytes = std::fs::read(path).unwrap();
    let document = format!("{{\"id\":\"{run}\"");
    let place = bytes.windows(document.len()).position(|window| window == document.as_bytes()).unwrap();
    bytes[place / PAGE * PAGE..][..PAGE].fill(0xA5);
    std::fs::write(path, bytes).unwrap();
}

/// Runs kept, and the service stopped in good order: all of it lies in the one file.
async fn with_runs(folder: &Path, runs: usize) -> Vec<(String, String)> {
    let mut served = serve(folder);
    let caller = Caller::of(&served);
    let mut kept = Vec::new();
    for _ in 0..runs {
        kept.push(caller.keep().await);
    }
    done(Command::new("kill").args(["-TERM", &served.child.id().to_string()]));
    assert!(served.child.wait().unwrap().success());
    kept
}

#[tokio::test]
async fn a_full_disk_refuses_writes_and_serves_again_when_there_is_room() {
    let folder = tempfile::tempdir().unwrap();
    let mounted = Mounted::new(folder.path(), "12m");
    let served = serve(folder.path());
    let caller = Caller::of(&served);
    let mut kept = vec![caller.keep().await];
    assert_eq!(code(caller.get("/readyz").await).await, is(200, "ready\n"));
    // Whatever is left is filled up.
    let filler = folder.path().join("filler");
    let _ = std::fs::write(&filler, vec![0; 16 << 20]);
    let begun = Instant::now();
    let refused = loop {
        let response = caller.post().await;
        if response.status().as_u16() != 201 {
            break code(response).await;
        }
        let place = response.headers()["location"].to_str().unwrap().to_owned();
        kept.push((place, response.text().await.unwrap()));
        assert!(begun.elapsed() < Duration::from_secs(60), "the disk takes more and more");
    };
    assert_eq!(refused, is(503, "store_full"));
    assert_eq!(code(caller.get("/readyz").await).await, is(503, "store_full"));
    assert_eq!(caller.get("/livez").await.status().as_u16(), 200);
    for run in &kept {
        caller.is_kept(run).await;
    }
    let body = json!({"degree_kind": "received"});
    let network = caller.send(Method::PUT, "/v1/networks/heronsgate", Some(&body)).await;
    assert_eq!(code(network).await, is(503, "store_full"));
    std::fs::remove_file(&filler).unwrap();
    assert_eq!(code(caller.get("/readyz").await).await, is(200, "ready\n"));
    kept.push(caller.keep().await);
    served.kill();
    let served = serve(folder.path());
    for run in &kept {
        Caller::of(&served).is_kept(run).await;
    }
    drop((served, mounted));
}

/// Files that may not be changed: what a disk does that fails or is mounted anew for reading only.
#[tokio::test]
async fn a_log_that_cannot_be_written_refuses_writes_until_it_can() {
    let folder = tempfile::tempdir().unwrap();
    let served = serve(folder.path());
    let caller = Caller::of(&served);
    let kept = caller.keep().await;
    let files = ["tailcast.db", "tailcast.db-wal"].map(|name| folder.path().join(name));
    done(Command::new("chattr").arg("+i").args(&files));
    let (refused, ready, read) =
        (code(caller.post().await).await, code(caller.get("/readyz").await).await, caller.get(&kept.0).await);
    done(Command::new("chattr").arg("-i").args(&files));
    assert_eq!(refused, is(503, "store_unavailable"));
    // A connection that is made anew finds that it may only read.
    assert!([is(503, "store_unavailable"), is(503, "store_read_only")].contains(&ready), "{ready:?}");
    assert_eq!(read.status().as_u16(), 200);
    // A writer that was opened while it could only read finds so at the next probe, and is made anew.
    let mut probes = Vec::new();
    while probes.last() != Some(&is(200, "ready\n")) && probes.len() < 4 {
        probes.push(code(caller.get("/readyz").await).await);
    }
    assert_eq!(probes.last(), Some(&is(200, "ready\n")), "{probes:?}");
    caller.keep().await;
    caller.is_kept(&kept).await;
}

#[tokio::test]
async fn a_database_that_can_only_be_read_is_told_at_the_start() {
    let folder = tempfile::tempdir().unwrap();
    let mounted = Mounted::new(folder.path(), "12m");
    with_runs(folder.path(), 1).await;
    mounted.remount("ro");
    let words = refusal(folder.path());
    assert!(words.contains("mount the disk for writing"), "{words}");
}

#[tokio::test]
async fn a_lock_held_by_another_process_is_told_at_the_start() {
    let folder = tempfile::tempdir().unwrap();
    with_runs(folder.path(), 1).await;
    let url = format!("sqlite://{}", folder.path().join("tailcast.db").display());
    let mut other = SqliteConnection::connect(&url).await.unwrap();
    other.execute("PRAGMA locking_mode = EXCLUSIVE").await.unwrap();
    other.execute("BEGIN EXCLUSIVE").await.unwrap();
    let words = refusal(folder.path());
    assert!(words.contains("another process holds its lock") && words.contains("stop that process"), "{words}");
}

#[tokio::test]
async fn a_damaged_file_is_not_served_and_the_remedy_is_told() {
    let folder = tempfile::tempdir().unwrap();
    with_runs(folder.path(), 30).await;
    let path = folder.path().join("tailcast.db");
    spoil(&path);
    let words = refusal(folder.path());
    assert!(words.contains("the database file is damaged") && words.contains("tailcast restore FILE"), "{words}");
    std::fs::write(
        &path,
        "no database, but words that somebody wrote over it, long enough to pass for a header of one\n".repeat(50),
    )
    .unwrap();
    let words = refusal(folder.path());
    assert!(words.contains("file is not a database") && words.contains("tailcast restore FILE"), "{words}");
}

/// Damage that is found while the service runs: nothing more is written, what can be read still is.
#[tokio::test]
async fn damage_found_later_stops_writes_and_leaves_sound_parts_readable() {
    let folder = tempfile::tempdir().unwrap();
    let kept = with_runs(folder.path(), 30).await;
    let spoilt = kept[10].0.rsplit('/').next().unwrap();
    spoil_page_of(&folder.path().join("tailcast.db"), spoilt);
    // The start looks at nothing, and the rest is looked at while the service runs.
    let served = serve_with(folder.path(), &[("TAILCAST_DATABASE_CHECK_ON_START_MS", "0")]);
    let caller = Caller::of(&served);
    let begun = Instant::now();
    while code(caller.get("/readyz").await).await != is(503, "store_corrupt") {
        assert!(begun.elapsed() < Duration::from_secs(20), "the damage is not found");
        tokio::time::sleep(Duration::from_millis(30)).await;
    }
    assert_eq!(code(caller.post().await).await, is(503, "store_corrupt"));
    let mut sound = 0;
    for (place, text) in &kept {
        let read = caller.get(place).await;
        match read.status().as_u16() {
            200 => {
                assert_eq!(&read.text().await.unwrap(), text);
                sound += 1;
            }
            _ => assert_eq!(code(read).await, is(503, "store_corrupt"), "{place}"),
        }
    }
    assert!(sound > 0 && sound < kept.len(), "{sound} of {} runs are read", kept.len());
}

/// The clock goes back by a day and a half between two processes: ids go on above those that are stored, and times are true.
#[tokio::test]
async fn a_clock_that_went_back_leaves_the_order_of_runs_and_the_truth_of_times() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("clock.db").display());
    let begin = || Service::start_with(|config| config.database.url = url.clone());
    let ahead = jiff::Timestamp::now() + jiff::SignedDuration::from_hours(36);
    let service = begin().await;
    let old = service.post("/v1/fits", &fit_body()).await.expect(201).json();
    service.stop().await;
    let id = uuid::Builder::from_unix_timestamp_millis(u64::try_from(ahead.as_millisecond()).unwrap(), &[7; 10]);
    let id = id.into_uuid().to_string();
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    sqlx::query("UPDATE runs SET id = $1, created_at = $2")
        .bind(&id)
        .bind(ahead.as_microsecond())
        .execute(&mut database)
        .await
        .unwrap();
    database.close().await.unwrap();

    let service = begin().await;
    let later = service.post("/v1/fits", &fit_body()).await.expect(201).json();
    let list = service.get("/v1/fits").await.expect(200).json();
    let ids: Vec<&str> = list["items"].as_array().unwrap().iter().map(|line| line["id"].as_str().unwrap()).collect();
    assert_eq!(ids, [later["id"].as_str().unwrap(), &id], "the newest first");
    let made: jiff::Timestamp = later["created_at"].as_str().unwrap().parse().unwrap();
    let first: jiff::Timestamp = old["created_at"].as_str().unwrap().parse().unwrap();
    assert!(made >= first && made <= jiff::Timestamp::now(), "{made}");
    // RFC 9110, section 8.8.2.1: not later than the answer itself.
    let read = service.get(&format!("/v1/fits/{id}")).await.expect(200);
    let modified = httpdate::parse_http_date(read.header("last-modified")).unwrap();
    assert!(modified <= std::time::SystemTime::now());
    service.stop().await;
}

/// An event that waits for a time further ahead than any pause is long is sent, not waited for.
#[tokio::test]
async fn a_clock_that_went_back_does_not_hold_up_notices() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("notices.db").display());
    let receiver = Receiver::start().await;
    let begin = || {
        Service::start_with(|config| {
            config.database.url = url.clone();
            sends(config, &[&receiver.origin()]);
        })
    };
    let service = begin().await;
    service.put("/v1/networks/heronsgate", &crate::tracking::settings()).await.expect(201);
    let limit = json!({"threshold": 10, "max_nodes": 1, "by": "2026-08-01"});
    service.put("/v1/networks/heronsgate/limits/fan-out", &limit).await.expect(201);
    service.put("/v1/networks/heronsgate/notices/on-call", &json!({"url": receiver.hook()})).await.expect(201);
    receiver.will_answer(&[500]);
    crate::tracking::put_counts(&service, "2026-06-01", &crate::harness::COUNTS[1]).await;
    receiver.wait_for(1).await;
    service.stop().await;
    let before = receiver.calls().len();
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    let ahead = (jiff::Timestamp::now() + jiff::SignedDuration::from_hours(1000)).as_microsecond();
    for statement in [
        "UPDATE notices SET due_at = $1",
        "UPDATE notice_events SET created_at = created_at, state = 'pending' WHERE $1 > 0",
    ] {
        sqlx::query(statement).bind(ahead).execute(&mut database).await.unwrap();
    }
    database.close().await.unwrap();
    let service = begin().await;
    receiver.wait_for(before + 1).await;
    service.stop().await;
}

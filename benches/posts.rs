//! What a forecast costs besides its computation: `POST /v1/forecasts` end to end beside the same computation alone, and runs kept beside
//! raw single-row inserts with the same durability. Rounds alternate; medians are told.
//!
//! usage: cargo bench --bench posts
#![allow(clippy::unwrap_used, clippy::panic, clippy::print_stdout, missing_docs)]

use std::io::{BufRead, BufReader, Read, Write};
use std::net::TcpStream;
use std::path::Path;
use std::time::{Duration, Instant};

use jiff::{SignedDuration, Timestamp};
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection, SqliteJournalMode, SqliteSynchronous};
use sqlx::{Connection, Executor};
use tailcast::config::Config;
use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Snapshot, Thresholds,
};
use tailcast::store::{NewRun, RunKind, Store};
use tokio::runtime::Builder;
use uuid::Uuid;

const ROUNDS: usize = 301;
const ROWS: usize = 200;
const PER_DAY: f64 = 300.0;
const THRESHOLDS: [u64; 5] = [10, 100, 1_000, 5_000, 10_000];

fn main() {
    let folder = tempfile::tempdir().unwrap();
    let variables = [
        ("TAILCAST_BIND", "127.0.0.1:0".to_owned()),
        ("TAILCAST_DATABASE_URL", format!("sqlite://{}", folder.path().join("bench.db").display())),
        ("TAILCAST_LOG_FILTER", "warn".to_owned()),
    ];
    let config = Config::from_sources(None, variables.map(|(k, v)| (k.to_owned(), v)).into_iter()).unwrap();
    let database = config.database.clone();
    let runtime = Builder::new_multi_thread().worker_threads(1).enable_all().build().unwrap();
    let running = runtime.block_on(tailcast::app::start(config)).unwrap_or_else(|stop| panic!("{stop:?}"));
    let counts = grown();
    let (request, body) = (request(&counts), body(&counts));
    let mut connection = BufReader::new(TcpStream::connect(running.address()).unwrap());
    connection.get_ref().set_nodelay(true).unwrap();
    let (mut posted, mut computed, mut beyond, mut document) = (Vec::new(), Vec::new(), Vec::new(), String::new());
    for _ in 0..ROUNDS {
        let start = Instant::now();
        std::hint::black_box(answer(&request, &|| false).unwrap());
        let alone = start.elapsed();
        let start = Instant::now();
        document = post(&mut connection, &body);
        let whole = start.elapsed();
        posted.push(whole.as_secs_f64());
        computed.push(alone.as_secs_f64());
        beyond.push(whole.as_secs_f64() - alone.as_secs_f64());
    }
    println!(
        "POST /v1/forecasts, {} distinct degrees in {} kB, answered with {} kB; medians of {ROUNDS} rounds",
        counts.degrees().len(),
        body.len() / 1_000,
        document.len() / 1_000
    );
    println!("  end to end        {:>7.3} ms", 1e3 * median(&mut posted));
    println!("  computation alone {:>7.3} ms", 1e3 * median(&mut computed));
    println!("  beyond it         {:>7.3} ms", 1e3 * median(&mut beyond));
    runtime.block_on(running.stop());

    let (kept, raw) = runtime.block_on(async {
        let store = Store::connect(&database).await.unwrap();
        let mut raw = raw_table(&folder.path().join("raw.db")).await;
        let (mut kept, mut inserted) = (Vec::new(), Vec::new());
        for _ in 0..ROWS {
            let run = run(&document, &body);
            let start = Instant::now();
            store.insert_run(&run, None).await.unwrap();
            kept.push(start.elapsed().as_secs_f64());
            let start = Instant::now();
            insert_raw(&mut raw, &run).await;
            inserted.push(start.elapsed().as_secs_f64());
        }
        (median(&mut kept), median(&mut inserted))
    });
    println!("one run kept, write-ahead log synchronised in full; medians of {ROWS} in turns");
    println!("  by the store      {:>7.3} ms", 1e3 * kept);
    println!("  raw insert        {:>7.3} ms   rate of the store over raw {:.2}", 1e3 * raw, raw / kept);
}

/// 10⁶ nodes, three links each, p = 0.8.
fn grown() -> DegreeCounts {
    let forces = GrowthParameters::new(
        DegreeKind::Received,
        AttachmentMix::new(0.8).unwrap(),
        ArrivalPlan::constant(1.0).unwrap(),
        EntryDegrees::single(0),
        3.0,
    );
    let mut network = Simulation::new(&DegreeCounts::from_pairs(&[(0, 1)]).unwrap(), forces.unwrap(), 1).unwrap();
    network.arrive_many(1_000_000).unwrap();
    network.degree_counts().unwrap()
}

fn request(counts: &DegreeCounts) -> OriginRequest {
    let as_of: Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    let dates: Vec<_> = (1..=12).map(|month| as_of + SignedDuration::from_hours(24 * 30 * month)).collect();
    let snapshot = Snapshot { as_of, counts: counts.clone() };
    OriginRequest {
        evidence: Evidence::new(DegreeKind::Received, vec![snapshot], None).unwrap(),
        fit: FitRequest::default(),
        arrivals: Some(ArrivalPlan::constant(PER_DAY).unwrap()),
        plan: ForecastPlan::new(as_of, Thresholds::new(&THRESHOLDS).unwrap(), &dates, Levels::default()).unwrap(),
        questions: Default::default(),
    }
}

/// The same as a caller writes it.
fn body(counts: &DegreeCounts) -> String {
    serde_json::json!({
        "degree_kind": "received",
        "snapshots": [{ "as_of": "2026-01-01", "degree_counts": counts.iter().collect::<Vec<_>>() }],
        "arrivals": { "per_day": PER_DAY },
        "thresholds": THRESHOLDS,
        "horizon": { "ends_after": "P360D", "every": "P30D" },
    })
    .to_string()
}

fn post(connection: &mut BufReader<TcpStream>, body: &str) -> String {
    let head = format!(
        "POST /v1/forecasts HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\ncontent-length: {}\r\n\r\n",
        body.len()
    );
    connection.get_mut().write_all(&[head.as_bytes(), body.as_bytes()].concat()).unwrap();
    let (mut length, mut line) = (0, String::new());
    connection.read_line(&mut line).unwrap();
    let status = line.clone();
    while line.trim() != "" {
        line.clear();
        connection.read_line(&mut line).unwrap();
        if let Some(value) = line.to_ascii_lowercase().strip_prefix("content-length:") {
            length = value.trim().parse().unwrap();
        }
    }
    let mut answer = vec![0; length];
    connection.read_exact(&mut answer).unwrap();
    let answer = String::from_utf8(answer).unwrap();
    assert!(status.contains(" 201 "), "{status} {answer}");
    answer
}

fn run(document: &str, inputs: &str) -> NewRun {
    NewRun {
        id: Uuid::now_v7(),
        kind: RunKind::Forecast,
        network: None,
        label: None,
        created_at: Timestamp::now(),
        engine: "bench",
        seed: 1,
        inputs_digest: format!("sha-256:{:064}", 0),
        tag: format!("{:064}", 0),
        document: document.to_owned(),
        inputs: inputs.to_owned(),
        stored: None,
    }
}

async fn raw_table(path: &Path) -> SqliteConnection {
    let options = SqliteConnectOptions::new()
        .filename(path)
        .create_if_missing(true)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(SqliteSynchronous::Full)
        .busy_timeout(Duration::from_secs(5));
    let mut connection = SqliteConnection::connect_with(&options).await.unwrap();
    connection.execute("CREATE TABLE runs (id TEXT PRIMARY KEY, document TEXT, inputs TEXT)").await.unwrap();
    connection
}

async fn insert_raw(connection: &mut SqliteConnection, run: &NewRun) {
    sqlx::query("INSERT INTO runs (id, document, inputs) VALUES ($1, $2, $3)")
        .bind(run.id.to_string())
        .bind(&run.document)
        .bind(&run.inputs)
        .execute(connection)
        .await
        .unwrap();
}

fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    values[values.len() / 2]
}

//! What a service at work tells of itself, metrics and fields of its log, held against the tables of docs/operating.md.

use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;
use std::time::{Duration, Instant};

use reqwest::{Client, Method};
use serde_json::{Value, json};

use crate::harness::{COUNTS, fit_body, pairs};
use crate::notice_receiver::SECRET;
use crate::notices::{growing, limit};
use crate::process::{Served, serve_with};

const PAGE: &str = include_str!("../../docs/operating.md");
/// Where nobody listens.
const NOWHERE: &str = "http://127.0.0.1:1";

/// Cells of the rows of a table of the page, each without its back ticks, by the table's first heading.
fn table(heading: &str) -> Vec<Vec<String>> {
    let lines = PAGE.lines().skip_while(|line| !line.starts_with(&format!("| {heading} |"))).skip(2);
    let cells = |line: &str| line.trim_matches('|').split('|').map(|cell| cell.trim().replace('`', "")).collect();
    lines.take_while(|line| line.starts_with('|')).map(cells).collect()
}

fn first_cells(heading: &str) -> BTreeSet<String> {
    table(heading).into_iter().map(|row| row[0].clone()).collect()
}

/// Asks a service, and tells its status and text.
async fn ask(served: &Served, method: Method, path: &str, body: Value) -> (u16, String) {
    let client = Client::builder().no_proxy().timeout(Duration::from_secs(60)).build().unwrap();
    let request = client.request(method, format!("http://{}{path}", served.address));
    let request = request.header("traceparent", "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01");
    let request = if body.is_null() { request } else { request.header("content-type", "application/json") };
    let answer = request.body(if body.is_null() { String::new() } else { body.to_string() }).send().await.unwrap();
    (answer.status().as_u16(), answer.text().await.unwrap())
}

async fn scrape(served: &Served) -> String {
    ask(served, Method::GET, "/metrics", Value::Null).await.1
}

/// A service with a reason to tell everything, used until it has told it or a minute has passed; its last exposition.
async fn used(folder: &Path) -> (Served, String) {
    let served = serve_with(
        folder,
        &[
            ("TAILCAST_LOG_FORMAT", "json"),
            ("TAILCAST_LOG_FILTER", "tailcast=debug"),
            ("TAILCAST_RETENTION_FITS_MOST", "1"),
            ("TAILCAST_RETENTION_EVERY_SECONDS", "1"),
            ("TAILCAST_NOTICES_DESTINATIONS", NOWHERE),
            ("TAILCAST_NOTICES_SECRET", SECRET),
            ("TAILCAST_TELEMETRY_OTLP_ENDPOINT", NOWHERE),
            ("TAILCAST_SOURCES_DATABASES", "links=postgres://127.0.0.1:9/links"),
            ("TAILCAST_HTTP_MAX_STREAMS", "0"),
            ("TAILCAST_HTTP_DRAIN_SECONDS", "1"),
            ("OTEL_BSP_SCHEDULE_DELAY", "50"),
        ],
    );
    let network = "/v1/networks/heronsgate";
    for path in ["/v1/fits", "/v1/fits"] {
        assert_eq!(ask(&served, Method::POST, path, fit_body()).await.0, 201);
    }
    assert!((400..500).contains(&ask(&served, Method::POST, "/v1/fits", json!({})).await.0));
    assert_eq!(ask(&served, Method::GET, "/v1/networks/elsewhere", Value::Null).await.0, 404);
    assert_eq!(ask(&served, Method::PUT, network, growing(false)).await.0, 201);
    let counts = json!({"degree_counts": pairs(&COUNTS[1])});
    assert_eq!(ask(&served, Method::PUT, &format!("{network}/snapshots/2026-06-01"), counts).await.0, 201);
    assert_eq!(ask(&served, Method::PUT, &format!("{network}/limits/fan-out"), limit()).await.0, 201);
    let notice = json!({"url": format!("{NOWHERE}/hook")});
    assert_eq!(ask(&served, Method::PUT, &format!("{network}/notices/on-call"), notice).await.0, 201);
    forecast(&served, network).await;
    assert_eq!(ask(&served, Method::PUT, network, growing(true)).await.0, 200);
    forecast(&served, network).await;
    assert_eq!(ask(&served, Method::GET, &format!("{network}/events"), Value::Null).await.0, 503);
    let query = "SELECT 1 AS degree, 1 AS nodes";
    let source = json!({"database": "links", "query": query, "every": "P1D"});
    assert_eq!(ask(&served, Method::PUT, &format!("{network}/source"), source).await.0, 201);
    let wanted = [
        "tailcast_notices_total",
        "tailcast_retention_removed_total",
        "tailcast_source_runs_total",
        "tailcast_trace_exports_total",
    ];
    let begun = Instant::now();
    loop {
        let text = scrape(&served).await;
        if wanted.iter().all(|name| text.contains(&format!("\n{name}{{"))) || begun.elapsed() > Duration::from_secs(60)
        {
            return (served, text);
        }
        tokio::time::sleep(Duration::from_millis(100)).await;
    }
}

/// Waits for the network's latest forecast.
async fn forecast(served: &Served, network: &str) {
    let begun = Instant::now();
    let client = Client::builder().no_proxy().build().unwrap();
    let url = format!("http://{}{network}/forecasts/latest", served.address);
    while client.get(&url).send().await.unwrap().headers().get("forecast-state").is_none_or(|state| state != "current")
    {
        assert!(begun.elapsed() < Duration::from_secs(60), "no forecast");
        tokio::time::sleep(Duration::from_millis(30)).await;
    }
}

/// Kind and labels of each family of an exposition; the bounds and parts of a histogram are the format's own.
fn families(text: &str) -> BTreeMap<String, (String, BTreeSet<String>)> {
    let typed = text.lines().filter_map(|line| line.strip_prefix("# TYPE ")?.split_once(' '));
    let mut families: BTreeMap<String, (String, BTreeSet<String>)> =
        typed.map(|(name, kind)| (name.to_owned(), (kind.to_owned(), BTreeSet::new()))).collect();
    let mut told = BTreeSet::new();
    for line in text.lines().filter(|line| !line.starts_with('#') && !line.is_empty()) {
        let name = &line[..line.find(['{', ' ']).unwrap()];
        let family = ["_bucket", "_sum", "_count"].iter().find_map(|end| name.strip_suffix(end)).unwrap_or(name);
        let (_, labels) = families.get_mut(family).unwrap_or_else(|| panic!("no TYPE: {line}"));
        let inside = line.split_once('{').map_or("", |(_, rest)| rest.rsplit_once('}').unwrap().0);
        // No label of this test has a comma or an equals sign in its value.
        let names = inside.split(',').filter_map(|pair| Some(pair.split_once('=')?.0.to_owned()));
        labels.extend(names.filter(|label| label != "le"));
        told.insert(family.to_owned());
    }
    families.retain(|name, _| told.contains(name));
    families
}

#[tokio::test]
async fn metrics_are_those_of_the_table_and_so_are_the_fields_of_the_log() {
    let folder = tempfile::tempdir().unwrap();
    let (served, text) = used(folder.path()).await;
    let told = families(&text);
    let written: BTreeMap<_, _> = table("metric")
        .into_iter()
        .map(|row| {
            let labels = row[3].split(", ").filter(|label| !label.is_empty()).map(str::to_owned).collect();
            (row[0].clone(), (row[1].clone(), labels))
        })
        .collect();
    assert_eq!(told, written, "left: told, right: the table");
    for (row, (kind, _)) in table("metric").iter().zip(written.values()) {
        // Conventions of Prometheus ("Metric and label naming"): base units at the end, counters end in _total.
        let (name, unit) = (&row[0], &row[2]);
        for base in ["seconds", "bytes"] {
            assert_eq!(unit.starts_with(base), name.trim_end_matches("_total").ends_with(base), "{name}: {unit}");
        }
        assert_eq!(&row[1] == "counter", name.ends_with("_total"), "{name}: {kind}");
        assert!(!unit.is_empty() && !row[4].is_empty(), "{name}");
    }

    let lines = served.stopped();
    let (fields, of_spans) = (first_cells("field"), first_cells("field of a span"));
    let (mut seen, mut seen_of_spans) = (BTreeSet::new(), BTreeSet::new());
    for line in lines {
        let line: Value = serde_json::from_str(&line).unwrap_or_else(|error| panic!("{error}: {line}"));
        seen.extend(line.as_object().unwrap().keys().cloned());
        let spans = line["spans"].as_array().into_iter().flatten().chain(line.get("span"));
        seen_of_spans.extend(spans.flat_map(|span| span.as_object().unwrap().keys().cloned()));
    }
    assert!(seen.is_subset(&fields), "not in the table: {:?}", seen.difference(&fields));
    assert_eq!(seen_of_spans, of_spans, "left: seen, right: the table");
    // What can be provoked without a fault of disk, clock or system.
    for provoked in [
        "timestamp",
        "level",
        "target",
        "message",
        "span",
        "spans",
        "elapsed_us",
        "code",
        "detail",
        "drain_seconds",
        "kind",
        "removed",
        "elapsed_ms",
        "network",
        "notice",
        "event",
        "given_up",
    ] {
        assert!(seen.contains(provoked), "{provoked} was not seen: {seen:?}");
    }
}

/// Names of the fields that the program's own lines have, as they are written in the source.
fn fields_in_source(folder: &Path, into: &mut BTreeSet<String>) {
    for entry in std::fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() {
            fields_in_source(&path, into);
        } else if path.extension().is_some_and(|end| end == "rs") {
            let text = std::fs::read_to_string(&path).unwrap();
            for level in ["error", "warn", "info", "debug", "trace"] {
                text.split(&format!("tracing::{level}!(")).skip(1).for_each(|rest| into.extend(fields_of(rest)));
            }
        }
    }
}

/// Fields of a macro's arguments: what stands before its message, at commas outside of brackets and texts.
fn fields_of(arguments: &str) -> Vec<String> {
    let (mut depth, mut quoted, mut part, mut parts) = (0, false, String::new(), Vec::new());
    for character in arguments.chars() {
        match character {
            '"' => quoted = !quoted,
            '(' | '[' if !quoted => depth += 1,
            ')' if !quoted && depth == 0 => break,
            ')' | ']' if !quoted => depth -= 1,
            ',' if !quoted && depth == 0 => {
                parts.push(std::mem::take(&mut part));
                continue;
            }
            _ => {}
        }
        part.push(character);
    }
    let named = |part: &String| part.split(" = ").next().unwrap().trim().trim_start_matches(['%', '?']).to_owned();
    parts.iter().filter(|part| !part.trim_start().starts_with('"')).map(named).collect()
}

#[test]
fn every_field_in_the_source_is_in_the_table_and_the_other_way_round() {
    let mut fields: BTreeSet<String> =
        ["timestamp", "level", "target", "message", "span", "spans"].map(str::to_owned).into();
    let given = fields.len();
    fields_in_source(Path::new("src"), &mut fields);
    assert!(fields.len() > given + 10, "the source was read: {fields:?}");
    assert_eq!(fields, first_cells("field"), "left: the source, right: the table");
}

//! Traces as a collector receives them: OTLP over HTTP, decoded here.

use std::collections::BTreeMap;
use std::io::Read;
use std::net::TcpListener;
use std::path::Path;
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};

use axum::Router;
use axum::body::Bytes;
use axum::extract::State;
use axum::http::HeaderMap;
use axum::routing::post;
use opentelemetry_proto::tonic::collector::trace::v1::ExportTraceServiceRequest;
use opentelemetry_proto::tonic::common::v1::any_value::Value as AnyValue;
use opentelemetry_proto::tonic::common::v1::{AnyValue as Any, KeyValue};
use opentelemetry_proto::tonic::trace::v1::Span;
use opentelemetry_proto::tonic::trace::v1::span::SpanKind;
use opentelemetry_proto::tonic::trace::v1::status::StatusCode;
use prost::Message;
use reqwest::{Client, Method, RequestBuilder};
use serde_json::{Value, json};

use crate::harness::{COUNTS, forecast_body, pairs};
use crate::process::{Served, serve_with};
use crate::tracking::settings;

const PARENT: &str = "00f067aa0ba902b7";
/// The ids of the example in W3C Trace Context, section 3.2.
const TRACE: &str = "4bf92f3577b34da6a3ce929d0e0e4736";

/// A collector on a port of its own.
#[derive(Clone, Default)]
struct Collector {
    batches: Arc<Mutex<Vec<(HeaderMap, ExportTraceServiceRequest)>>>,
}

impl Collector {
    async fn start() -> (Self, String) {
        let collector = Self::default();
        let routes = Router::new().route("/v1/traces", post(receive)).with_state(collector.clone());
        let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
        let address = listener.local_addr().unwrap();
        tokio::spawn(async move { axum::serve(listener, routes).await });
        (collector, format!("http://{address}"))
    }

    fn spans(&self) -> Vec<Span> {
        let batches = self.batches.lock().unwrap();
        let resources = batches.iter().flat_map(|(_, batch)| &batch.resource_spans);
        resources.flat_map(|resource| &resource.scope_spans).flat_map(|scope| scope.spans.clone()).collect()
    }
}

async fn receive(State(collector): State<Collector>, headers: HeaderMap, body: Bytes) {
    let batch = ExportTraceServiceRequest::decode(body).expect("OTLP in protobuf");
    collector.batches.lock().unwrap().push((headers, batch));
}

fn attributes(pairs: &[KeyValue]) -> BTreeMap<String, String> {
    let text = |value: &Option<Any>| match value.as_ref().and_then(|value| value.value.clone()) {
        Some(AnyValue::StringValue(text)) => text,
        Some(AnyValue::IntValue(number)) => number.to_string(),
        other => format!("{other:?}"),
    };
    pairs.iter().map(|pair| (pair.key.clone(), text(&pair.value))).collect()
}

fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

/// Names from a span up to the one without a parent among those received.
fn ancestry(spans: &[Span], span: &Span) -> Vec<String> {
    let mut names = vec![span.name.clone()];
    let mut at = span;
    while let Some(parent) = spans.iter().find(|other| other.span_id == at.parent_span_id) {
        names.push(parent.name.clone());
        at = parent;
    }
    names
}

fn traced(folder: &Path, endpoint: &str, more: &[(&str, &str)]) -> Served {
    let mut variables = vec![
        ("TAILCAST_TELEMETRY_OTLP_ENDPOINT", endpoint),
        ("OTEL_BSP_SCHEDULE_DELAY", "50"),
        ("OTEL_EXPORTER_OTLP_HEADERS", "x-collector-key=heronsgate"),
        ("OTEL_RESOURCE_ATTRIBUTES", "deployment.environment.name=trial"),
    ];
    variables.extend(more);
    serve_with(folder, &variables)
}

fn request(served: &Served, method: Method, path: &str) -> RequestBuilder {
    let client = Client::builder().no_proxy().timeout(Duration::from_secs(60)).build().unwrap();
    client.request(method, format!("http://{}{path}", served.address))
}

async fn send(request: RequestBuilder, body: &Value) -> u16 {
    request.header("content-type", "application/json").body(body.to_string()).send().await.unwrap().status().as_u16()
}

/// Asks it to stop, and waits until it has.
fn stop(mut served: Served) -> Duration {
    let begun = Instant::now();
    let asked = std::process::Command::new("kill").args(["-TERM", &served.child.id().to_string()]).status().unwrap();
    assert!(asked.success());
    assert!(served.child.wait().unwrap().success());
    begun.elapsed()
}

fn traceparent(flags: &str) -> String {
    format!("00-{TRACE}-{PARENT}-{flags}")
}

#[tokio::test(flavor = "multi_thread")]
async fn spans_nest_below_the_callers_and_name_nothing_that_a_caller_named() {
    let folder = tempfile::tempdir().unwrap();
    let (collector, endpoint) = Collector::start().await;
    let served = traced(folder.path(), &endpoint, &[("TAILCAST_HTTP_MAX_STREAMS", "0")]);
    let network = "/v1/networks/heronsgate";
    let mut body = forecast_body();
    body["label"] = json!("a label of the caller");
    let forecast = request(&served, Method::POST, "/v1/forecasts").header("traceparent", traceparent("01"));
    assert_eq!(send(forecast, &body).await, 201);
    assert_eq!(send(request(&served, Method::PUT, network), &settings()).await, 201);
    let snapshot = json!({"degree_counts": pairs(&COUNTS[1])});
    let put = request(&served, Method::PUT, &format!("{network}/snapshots/2026-06-01"));
    assert_eq!(send(put, &snapshot).await, 201);
    let latest = format!("{network}/forecasts/latest");
    let begun = Instant::now();
    while request(&served, Method::GET, &latest).send().await.unwrap().status() != 200 {
        assert!(begun.elapsed() < Duration::from_secs(60));
        tokio::time::sleep(Duration::from_millis(20)).await;
    }
    let refused = request(&served, Method::GET, &format!("{network}/events")).header("accept", "text/event-stream");
    assert_eq!(refused.send().await.unwrap().status(), 503);
    let unknown = request(&served, Method::GET, "/v1/networks/elsewhere").send().await.unwrap();
    assert_eq!(unknown.status(), 404);
    stop(served);

    let spans = collector.spans();
    let named = |name: &str| spans.iter().filter(|span| span.name == name).collect::<Vec<_>>();
    let posted = named("POST /v1/forecasts")[0];
    assert_eq!((hex(&posted.trace_id), hex(&posted.parent_span_id)), (TRACE.to_owned(), PARENT.to_owned()));
    assert_eq!(posted.kind(), SpanKind::Server);
    let told = attributes(&posted.attributes);
    assert_eq!(told["http.route"], "/v1/forecasts");
    assert_eq!((told["http.request.method"].as_str(), told["http.response.status_code"].as_str()), ("POST", "201"));
    let within = |root: &str, name: &str| {
        let found = spans.iter().filter(|span| span.name == name).map(|span| ancestry(&spans, span));
        found.into_iter().find(|names| names.last().is_some_and(|last| last == root))
    };
    for (name, above) in [
        ("receive", vec!["POST /v1/forecasts"]),
        ("parse", vec!["POST /v1/forecasts"]),
        ("wait for a worker", vec!["POST /v1/forecasts"]),
        ("compute", vec!["POST /v1/forecasts"]),
        ("fit", vec!["compute", "POST /v1/forecasts"]),
        ("forecast", vec!["compute", "POST /v1/forecasts"]),
        ("write", vec!["POST /v1/forecasts"]),
    ] {
        let names = within("POST /v1/forecasts", name).unwrap_or_else(|| panic!("no span {name:?}"));
        assert_eq!(names[1..], above, "{name}");
    }
    // The refresh that a change takes on belongs to the trace of the change.
    let job = within("PUT /v1/networks/{name}/snapshots/{as_of}", "job").expect("a job's span");
    assert!(job.len() >= 2, "{job:?}");
    let fits: Vec<_> = named("fit").into_iter().map(|span| ancestry(&spans, span)).collect();
    assert!(fits.iter().any(|names| names.contains(&"job".to_owned())), "{fits:?}");
    let failed = named("GET /v1/networks/{name}/events")[0];
    assert_eq!(failed.status.as_ref().unwrap().code(), StatusCode::Error);
    assert_eq!(attributes(&failed.attributes)["error.type"], "503");
    let unknown = named("GET /v1/networks/{name}")[0];
    assert_eq!(unknown.status.as_ref().map_or(StatusCode::Unset, |status| status.code()), StatusCode::Unset);

    for span in &spans {
        let text = format!("{} {:?} {:?}", span.name, attributes(&span.attributes), span.events);
        assert!(!text.contains("heronsgate") && !text.contains("label") && !text.contains("elsewhere"), "{text}");
        assert!(text.len() < 600 && span.dropped_attributes_count == 0, "{text}");
    }
    let batches = collector.batches.lock().unwrap();
    for (headers, batch) in batches.iter() {
        assert_eq!(headers["x-collector-key"], "heronsgate");
        assert_eq!(headers["content-type"], "application/x-protobuf");
        let resource = attributes(&batch.resource_spans[0].resource.as_ref().unwrap().attributes);
        assert_eq!(resource["service.name"], "tailcast");
        assert_eq!(resource["service.version"], env!("CARGO_PKG_VERSION"));
        assert_eq!(resource["deployment.environment.name"], "trial");
        assert!(resource.contains_key("service.instance.id"), "{resource:?}");
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn polls_from_memory_make_no_span_and_nothing_is_sent_when_off() {
    let (collector, endpoint) = Collector::start().await;
    let folder = tempfile::tempdir().unwrap();
    let served =
        traced(folder.path(), &endpoint, &[("OTEL_SDK_DISABLED", "true"), ("TAILCAST_TELEMETRY_OTLP_ENDPOINT", "")]);
    assert_eq!(send(request(&served, Method::POST, "/v1/forecasts"), &forecast_body()).await, 201);
    stop(served);
    let off = serve_with(folder.path(), &[("OTEL_EXPORTER_OTLP_ENDPOINT", &endpoint), ("OTEL_SDK_DISABLED", "true")]);
    assert_eq!(request(&off, Method::GET, "/livez").send().await.unwrap().status(), 200);
    stop(off);
    assert!(collector.batches.lock().unwrap().is_empty());

    let served = serve_with(folder.path(), &[("OTEL_EXPORTER_OTLP_ENDPOINT", &endpoint)]);
    let network = "/v1/networks/heronsgate";
    assert_eq!(send(request(&served, Method::PUT, network), &settings()).await, 201);
    let put = request(&served, Method::PUT, &format!("{network}/snapshots/2026-06-01"));
    assert_eq!(send(put, &json!({"degree_counts": pairs(&COUNTS[1])})).await, 201);
    let latest = format!("{network}/forecasts/latest");
    let begun = Instant::now();
    loop {
        let answer = request(&served, Method::GET, &latest).send().await.unwrap();
        if answer.headers().get("forecast-state").is_some_and(|state| state == "current") {
            break;
        }
        assert!(begun.elapsed() < Duration::from_secs(60));
        tokio::time::sleep(Duration::from_millis(20)).await;
    }
    for _ in 0..50 {
        assert_eq!(request(&served, Method::GET, &latest).send().await.unwrap().status(), 200);
    }
    stop(served);
    let polls = collector.spans().iter().filter(|span| span.name.ends_with("/forecasts/latest")).count();
    // Those that looked the copy up went the way of all requests; once a second one of them may.
    let looked_up = begun.elapsed().as_millis() as usize / 20 + 2;
    assert!((1..50.min(looked_up)).contains(&polls), "{polls}");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_share_of_new_traces_is_kept_and_a_callers_decision_followed() {
    let (collector, endpoint) = Collector::start().await;
    let folder = tempfile::tempdir().unwrap();
    let served =
        traced(folder.path(), &endpoint, &[("OTEL_TRACES_SAMPLER_ARG", "0"), ("OTEL_SERVICE_NAME", "forecasts")]);
    for header in [None, Some(traceparent("00")), Some(traceparent("01")), Some("nonsense".to_owned())] {
        let ask = request(&served, Method::GET, "/v1/networks");
        let ask = header.iter().fold(ask, |ask, value| ask.header("traceparent", value));
        assert_eq!(ask.send().await.unwrap().status(), 200);
    }
    stop(served);
    let spans = collector.spans();
    let roots: Vec<_> = spans.iter().filter(|span| span.name == "GET /v1/networks").collect();
    assert_eq!(roots.iter().map(|span| hex(&span.trace_id)).collect::<Vec<_>>(), [TRACE]);
    let batches = collector.batches.lock().unwrap();
    let resource = batches[0].1.resource_spans[0].resource.as_ref().unwrap();
    assert_eq!(attributes(&resource.attributes)["service.name"], "forecasts");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_collector_that_never_answers_costs_no_request_and_bounds_the_stop() {
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let endpoint = format!("http://{}", listener.local_addr().unwrap());
    let called = Arc::new(Mutex::new(0));
    let counted = called.clone();
    std::thread::spawn(move || {
        let mut open = Vec::new();
        // Ends with the test's process at the latest; the service makes few connections.
        for stream in listener.incoming().take(40).flatten() {
            *counted.lock().unwrap() += 1;
            open.push(stream);
        }
        open.iter_mut().for_each(|stream| drop(stream.read(&mut [0])));
    });
    let folder = tempfile::tempdir().unwrap();
    let queue = [("OTEL_BSP_MAX_QUEUE_SIZE", "20"), ("OTEL_BSP_MAX_EXPORT_BATCH_SIZE", "10")];
    let served =
        traced(folder.path(), &endpoint, &[&queue[..], &[("TAILCAST_TELEMETRY_TIMEOUT_SECONDS", "1")]].concat());
    let begun = Instant::now();
    let client = Client::builder().no_proxy().build().unwrap();
    let url = format!("http://{}/v1/networks", served.address);
    for _ in 0..300 {
        assert_eq!(client.get(&url).send().await.unwrap().status(), 200);
    }
    // Each would take a second if it waited for the collector.
    assert!(begun.elapsed() < Duration::from_secs(60), "{:?}", begun.elapsed());
    tokio::time::sleep(Duration::from_millis(1500)).await;
    let metrics = request(&served, Method::GET, "/metrics").send().await.unwrap().text().await.unwrap();
    assert!(metrics.contains("tailcast_trace_exports_total{outcome=\"failed\"}"), "{metrics}");
    let took = stop(served);
    assert!(took < Duration::from_secs(12), "{took:?}");
    assert!(*called.lock().unwrap() > 0);
}

#[tokio::test(flavor = "multi_thread")]
async fn a_line_of_the_log_leads_to_the_trace_that_began_with_it() {
    let (collector, endpoint) = Collector::start().await;
    let folder = tempfile::tempdir().unwrap();
    let log = [("TAILCAST_LOG_FILTER", "info"), ("TAILCAST_LOG_FORMAT", "text")];
    let served = traced(folder.path(), &endpoint, &log);
    let ask = request(&served, Method::GET, "/v1/networks").header("x-request-id", "asked-once");
    assert_eq!(ask.send().await.unwrap().status(), 200);
    let lines = served.log.clone();
    stop(served);
    let spans = collector.spans();
    let trace_id = hex(&spans.iter().find(|span| span.name == "GET /v1/networks").unwrap().trace_id);
    let lines = lines.lock().unwrap();
    let line = lines.iter().find(|line| line.contains("asked-once") && line.contains("served")).unwrap();
    assert!(line.contains(&trace_id), "{line}");
    // Spans of traces stay out of the log.
    assert!(!line.contains("http.route") && line.matches("request{").count() == 1, "{line}");
}

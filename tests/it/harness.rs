//! A service on a free port with a database of its own, and a client that holds every response against the promises
//! that all of them share.

use std::sync::LazyLock;

use reqwest::header::{CONTENT_TYPE, HeaderMap};
use reqwest::{Client, Method, RequestBuilder};
use serde_json::{Value, json};
use tailcast::app::{Running, start};
use tailcast::config::Config;
use tailcast::growth::Simulation;
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};
use tempfile::TempDir;

use crate::{postgres, schemas};

/// The OpenAPI document.
pub static DOCUMENT: LazyLock<Value> = LazyLock::new(|| serde_json::from_str(&tailcast::api::openapi_text()).unwrap());

/// A running service.
pub struct Service {
    running: Running,
    client: Client,
    _folder: TempDir,
}

/// A response, read to its end.
#[derive(Debug)]
pub struct Answer {
    pub status: u16,
    pub headers: HeaderMap,
    pub text: String,
}

/// Marks the request for a run of an older version, to this harness alone.
const OLDER: &str = "x-older-run";

impl Service {
    pub async fn start() -> Self {
        Self::start_with(|_| {}).await
    }

    pub async fn start_with(change: impl FnOnce(&mut Config)) -> Self {
        let folder = tempfile::tempdir().unwrap();
        let mut config = Config::from_sources(None, std::iter::empty()).unwrap();
        config.bind = "127.0.0.1:0".parse().unwrap();
        let file = format!("sqlite://{}", folder.path().join("it.db").display());
        config.database.url = postgres::fresh().await.unwrap_or(file);
        change(&mut config);
        let running = start(config).await.unwrap_or_else(|stop| panic!("{stop:?}"));
        Self { running, client: Client::builder().no_proxy().build().unwrap(), _folder: folder }
    }

    pub fn address(&self) -> std::net::SocketAddr {
        self.running.address()
    }

    pub async fn stop(self) {
        self.running.stop().await;
    }

    /// Stops it, and keeps its folder.
    pub async fn stop_and_keep(self) -> TempDir {
        self.running.stop().await;
        self._folder
    }

    pub fn request(&self, method: Method, path: &str) -> RequestBuilder {
        self.client.request(method, format!("http://{}{path}", self.address()))
    }

    pub async fn send(&self, method: Method, path: &str) -> Answer {
        answered(self.request(method, path)).await
    }

    pub async fn get(&self, path: &str) -> Answer {
        self.send(Method::GET, path).await
    }

    /// Reads a run of an older version: it is answered as it was kept, without what later versions added.
    pub async fn get_older(&self, path: &str) -> Answer {
        self.get_with(path, OLDER, "").await
    }

    pub async fn get_with(&self, path: &str, header: &str, value: &str) -> Answer {
        answered(self.request(Method::GET, path).header(header, value)).await
    }

    pub async fn post(&self, path: &str, body: &Value) -> Answer {
        self.post_text(path, body.to_string()).await
    }

    pub async fn put(&self, path: &str, body: &Value) -> Answer {
        self.put_with(path, json_text(body), &[]).await
    }

    pub async fn put_with(&self, path: &str, body: (&str, String), headers: &[(&str, &str)]) -> Answer {
        let request = self.request(Method::PUT, path).header(CONTENT_TYPE, body.0).body(body.1);
        answered(headers.iter().fold(request, |request, &(name, value)| request.header(name, value))).await
    }

    pub async fn delete_if(&self, path: &str, tag: &str) -> Answer {
        answered(self.request(Method::DELETE, path).header("if-match", tag)).await
    }

    pub async fn post_text(&self, path: &str, body: impl Into<reqwest::Body>) -> Answer {
        answered(self.request(Method::POST, path).header(CONTENT_TYPE, "application/json").body(body)).await
    }
}

/// A request's body with its media type.
pub fn csv(text: &str) -> (&'static str, String) {
    ("text/csv", text.to_owned())
}

/// A request's body with its media type.
pub fn json_text(body: &Value) -> (&'static str, String) {
    ("application/json", body.to_string())
}

/// Sends a request and checks what every response promises.
pub async fn answered(request: RequestBuilder) -> Answer {
    let (client, request) = request.build_split();
    let request = request.unwrap();
    let (method, path) = (request.method().clone(), request.url().path().to_owned());
    let older = request.headers().contains_key(OLDER);
    let response = client.execute(request).await.unwrap();
    let (status, headers) = (response.status().as_u16(), response.headers().clone());
    let answer = Answer { status, headers, text: response.text().await.unwrap() };
    check_promises(&method, &path, &answer, older);
    answer
}

fn check_promises(method: &Method, path: &str, answer: &Answer, older: bool) {
    let context = format!("{method} {path}: {answer:?}");
    assert!(!answer.header("x-request-id").is_empty(), "{context}");
    if answer.status >= 400 {
        assert_eq!(answer.header("content-type"), "application/problem+json", "{context}");
        if *method != Method::HEAD {
            let problem = answer.json();
            assert_eq!(problem["status"], answer.status, "{context}");
            assert_eq!(problem["request_id"], answer.header("x-request-id"), "{context}");
            assert_eq!(problem["instance"], path, "{context}");
            for member in ["type", "title", "code", "detail"] {
                assert!(problem[member].as_str().is_some_and(|text| !text.is_empty()), "{member}: {context}");
            }
        }
        if [408, 503].contains(&answer.status) {
            assert!(answer.status == 408 || answer.headers.contains_key("retry-after"), "{context}");
        }
    }
    if let Some(operation) = operation(method, path) {
        let documented = &operation["responses"][answer.status.to_string()];
        assert!(documented.is_object(), "undocumented status: {context}");
        let media_type = answer.header("content-type").split(';').next().unwrap_or_default().to_owned();
        let listed: Vec<&str> = documented["content"]
            .as_object()
            .into_iter()
            .flatten()
            .map(|(name, _)| name.split(';').next().unwrap())
            .collect();
        assert!(listed.is_empty() || listed.contains(&media_type.as_str()), "undocumented media type: {context}");
        let schema = &documented["content"][&media_type]["schema"];
        if !older && media_type.ends_with("json") && schema.is_object() && !answer.text.is_empty() {
            let faults = schemas::faults(schema, &answer.json());
            assert!(faults.is_empty(), "not as documented: {faults:?} {context}");
        }
    }
}

/// The document's operation for a request, if it lists one.
fn operation(method: &Method, path: &str) -> Option<&'static Value> {
    let fits = |template: &str| {
        let (a, b): (Vec<&str>, Vec<&str>) = (template.split('/').collect(), path.split('/').collect());
        a.len() == b.len() && a.iter().zip(&b).all(|(a, b)| a == b || (a.starts_with('{') && !b.is_empty()))
    };
    let paths = DOCUMENT["paths"].as_object().unwrap();
    let (_, item) = paths.iter().find(|(template, _)| fits(template))?;
    item.get(method.as_str().to_lowercase())
}

impl Answer {
    pub fn header(&self, name: &str) -> &str {
        self.headers.get(name).map_or("", |value| value.to_str().unwrap())
    }

    pub fn json(&self) -> Value {
        serde_json::from_str(&self.text).unwrap_or_else(|error| panic!("{error}: {self:?}"))
    }

    #[track_caller]
    pub fn expect(self, status: u16) -> Self {
        assert_eq!(self.status, status, "{}", self.text);
        self
    }

    /// Checks a problem's status and code.
    #[track_caller]
    pub fn expect_problem(self, status: u16, code: &str) -> Self {
        let answer = self.expect(status);
        assert_eq!(answer.json()["code"], code, "{}", answer.text);
        answer
    }

    /// The places of a problem's faults.
    pub fn places(&self) -> Vec<String> {
        let errors = self.json()["errors"].as_array().cloned().unwrap_or_default();
        let place = |error: &Value| {
            let text = ["pointer", "parameter", "header"].iter().find_map(|&member| error[member].as_str());
            text.map(str::to_owned).or_else(|| error["line"].as_u64().map(|line| format!("line {line}")))
        };
        errors.iter().filter_map(place).collect()
    }
}

/// Degree counts of a small Heronsgate, grown once: every candidate can be fitted to it.
pub static COUNTS: LazyLock<[DegreeCounts; 2]> = LazyLock::new(|| {
    let mix = AttachmentMix::new(0.7).unwrap();
    let arrivals = ArrivalPlan::constant(50.0).unwrap();
    let forces = GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap();
    let founders = DegreeCounts::from_pairs(&[(0, 10), (2, 10)]).unwrap();
    let mut network = Simulation::new(&founders, forces, 11).unwrap();
    [60.0, 90.0].map(|day| {
        network.run_until(day).unwrap();
        network.degree_counts().unwrap()
    })
});

pub fn pairs(counts: &DegreeCounts) -> Value {
    json!(counts.iter().collect::<Vec<_>>())
}

/// A forecast's body that is answered as it stands.
pub fn forecast_body() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": pairs(&COUNTS[1])}],
        "arrivals": {"per_day": 50.0},
        "links_per_arrival": 3.0,
        "thresholds": [10, 50],
        "dates": ["2026-07-01", "2026-09-01"],
    })
}

/// A fit's body that is answered as it stands.
pub fn fit_body() -> Value {
    json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": pairs(&COUNTS[1])}],
        "links_per_arrival": 3.0,
    })
}

/// `body` with the value at a pointer replaced, or added to its object; null takes it away.
pub fn changed(mut body: Value, pointer: &str, value: Value) -> Value {
    let (parent, name) = pointer.rsplit_once('/').unwrap();
    let parent = body.pointer_mut(parent).unwrap();
    match parent {
        Value::Object(fields) if value.is_null() => drop(fields.remove(name)),
        Value::Object(fields) => drop(fields.insert(name.to_owned(), value)),
        Value::Array(items) => items[name.parse::<usize>().unwrap()] = value,
        _ => panic!("{pointer} has no parent"),
    }
    body
}

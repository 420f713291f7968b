//! A receiver of notices on a port of its own, which checks every signature by RFC 2104 itself.

use std::collections::{BTreeSet, VecDeque};
use std::net::SocketAddr;
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant, SystemTime, UNIX_EPOCH};

use axum::Router;
use axum::extract::{Request, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::{IntoResponse, Response};
use base64::Engine as _;
use base64::engine::general_purpose::STANDARD;
use serde_json::Value;
use sha2::{Digest, Sha256};
use tokio::net::TcpListener;

/// The base64 of 32 bytes.
pub const SECRET: &str = "whsec_SGVyb25zZ2F0ZSBrZWVwcyBpdHMgc2VjcmV0IHdlbGw=";

/// A call as it came.
#[derive(Debug, Clone)]
pub struct Received {
    pub at: Instant,
    pub path: String,
    pub headers: HeaderMap,
    pub text: String,
}

#[derive(Clone, Default)]
struct Shared {
    calls: Arc<Mutex<Vec<Received>>>,
    answers: Arc<Mutex<VecDeque<u16>>>,
}

pub struct Receiver {
    pub address: SocketAddr,
    shared: Shared,
}

impl Receiver {
    pub async fn start() -> Self {
        Self::at("127.0.0.1:0".parse().unwrap()).await
    }

    /// A receiver at an address.
    pub async fn at(address: SocketAddr) -> Self {
        let listener = TcpListener::bind(address).await.unwrap();
        let address = listener.local_addr().unwrap();
        let shared = Shared::default();
        let routes = Router::new().fallback(answer).with_state(shared.clone());
        tokio::spawn(async move { axum::serve(listener, routes).await });
        Self { address, shared }
    }

    /// The origin that an operator lists.
    pub fn origin(&self) -> String {
        format!("http://{}", self.address)
    }

    pub fn hook(&self) -> String {
        format!("{}/hook", self.origin())
    }

    /// Answers the next calls so, and every later one 204.
    pub fn will_answer(&self, statuses: &[u16]) {
        self.shared.answers.lock().unwrap().extend(statuses);
    }

    /// Every call so far, each of them signed as it must be.
    pub fn calls(&self) -> Vec<Received> {
        let calls = self.shared.calls.lock().unwrap().clone();
        calls.iter().for_each(Received::check);
        calls
    }

    /// The calls when there are at least so many.
    pub async fn wait_for(&self, count: usize) -> Vec<Received> {
        let begun = Instant::now();
        while self.calls().len() < count {
            assert!(begun.elapsed() < Duration::from_secs(60), "{} of {count} calls", self.calls().len());
            tokio::time::sleep(Duration::from_millis(10)).await;
        }
        self.calls()
    }

    /// The events that came, each once, in the order of their first coming.
    pub fn events(&self) -> Vec<Value> {
        let mut seen = BTreeSet::new();
        let events = self.calls().into_iter().map(|call| call.event());
        events.filter(|event| seen.insert(event["id"].to_string())).collect()
    }
}

async fn answer(State(shared): State<Shared>, request: Request) -> Response {
    let (parts, body) = request.into_parts();
    let bytes = axum::body::to_bytes(body, 1 << 20).await.unwrap();
    let text = String::from_utf8(bytes.to_vec()).unwrap();
    let path = parts.uri.path().to_owned();
    shared.calls.lock().unwrap().push(Received { at: Instant::now(), path, headers: parts.headers, text });
    let status = shared.answers.lock().unwrap().pop_front().unwrap_or(204);
    (StatusCode::from_u16(status).unwrap(), [("location", "/elsewhere")]).into_response()
}

impl Received {
    pub fn event(&self) -> Value {
        serde_json::from_str(&self.text).unwrap()
    }

    pub fn header(&self, name: &str) -> &str {
        self.headers[name].to_str().unwrap()
    }

    /// What CloudEvents 1.0 (structured mode) and Standard Webhooks 1.0 ask of a call.
    fn check(&self) {
        assert_eq!(self.header("content-type"), "application/cloudevents+json; charset=utf-8");
        let event = self.event();
        assert_eq!(event["specversion"], "1.0");
        for attribute in ["id", "source", "type"] {
            assert!(event[attribute].as_str().is_some_and(|text| !text.is_empty()), "{attribute}: {event}");
        }
        let (id, timestamp) = (self.header("webhook-id"), self.header("webhook-timestamp"));
        assert_eq!(event["id"], id);
        let now = SystemTime::now().duration_since(UNIX_EPOCH).unwrap().as_secs();
        assert!(timestamp.parse::<u64>().unwrap().abs_diff(now) < 300, "{timestamp}");
        let key = STANDARD.decode(SECRET.strip_prefix("whsec_").unwrap()).unwrap();
        let signed = format!("{id}.{timestamp}.{}", self.text);
        let expected = format!("v1,{}", STANDARD.encode(hmac_sha256(&key, signed.as_bytes())));
        assert_eq!(self.header("webhook-signature"), expected);
    }
}

/// H(K ⊕ opad, H(K ⊕ ipad, text)), RFC 2104, section 2, for keys of up to a block.
fn hmac_sha256(key: &[u8], text: &[u8]) -> Vec<u8> {
    let padded = |pad: u8| {
        let mut block = [pad; 64];
        block.iter_mut().zip(key).for_each(|(byte, key)| *byte ^= key);
        block
    };
    let inner = Sha256::new().chain_update(padded(0x36)).chain_update(text).finalize();
    Sha256::new().chain_update(padded(0x5c)).chain_update(inner).finalize().to_vec()
}

/// RFC 4231, test case 2.
#[test]
fn the_receivers_own_signature_is_right() {
    let hex: String =
        hmac_sha256(b"Jefe", b"what do ya want for nothing?").iter().map(|byte| format!("{byte:02x}")).collect();
    assert_eq!(hex, "5bdcc146bf60754e6a042426089575c75a003f089d2739839dec58b964ec3843");
}

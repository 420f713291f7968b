//! The Idempotency-Key header.

use axum::extract::FromRequestParts;
use axum::http::request::Parts;

use super::JsonBody;
use crate::api::decode::Place;
use crate::api::{ApiError, AppState};
use crate::service::{KeyClaim, NetworkName, sha256_hex};

const NAME: &str = "idempotency-key";
const MAX_CHARS: usize = 255;

/// The key of a POST, if it has one: requests with the same key and body are one and the same.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct IdempotencyKey(Option<String>);

impl IdempotencyKey {
    /// The key's claim on a body.
    pub fn claim(self, body: &JsonBody) -> Option<KeyClaim> {
        self.0.map(|key| KeyClaim { key, body_digest: sha256_hex(body.bytes()) })
    }

    /// The key's claim on a body that is meant for a network: keys of different networks have nothing to do with each other.
    pub fn claim_for(self, network: &NetworkName, body: &JsonBody) -> Option<KeyClaim> {
        // Neither a name nor a key holds a space.
        self.0.map(|key| KeyClaim { key: format!("{} {key}", network.as_str()), body_digest: sha256_hex(body.bytes()) })
    }
}

impl FromRequestParts<AppState> for IdempotencyKey {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut values = parts.headers.get_all(NAME).iter();
        let (first, second) = (values.next(), values.next());
        let Some(value) = first else { return Ok(Self(None)) };
        let usable =
            |text: &&str| (1..=MAX_CHARS).contains(&text.len()) && text.bytes().all(|byte| byte.is_ascii_graphic());
        match value.to_str().ok().filter(usable) {
            Some(key) if second.is_none() => Ok(Self(Some(key.to_owned()))),
            _ => {
                let detail = format!("a key is 1 to {MAX_CHARS} visible ASCII characters, given once");
                Err(ApiError::fault(Place::Header(NAME), detail))
            }
        }
    }
}

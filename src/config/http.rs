//! Connections, bodies, answers and streams.

use std::time::Duration;

use serde::Deserialize;

/// Limits of the HTTP side.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct HttpConfig {
    /// Connections open at the same time.
    pub max_connections: usize,
    /// Largest request body, bytes.
    pub body_limit_bytes: usize,
    /// Memory for the bodies of all requests in work, bytes.
    pub bodies_bytes: usize,
    /// Memory for all answers on their way, bytes.
    pub answers_bytes: usize,
    /// Longest time in which a client takes nothing of an answer worth speaking of, seconds.
    pub answer_pause_seconds: u64,
    /// Longest time to send a request's head, seconds.
    pub head_timeout_seconds: u64,
    /// Longest time to send a body, seconds.
    pub body_timeout_seconds: u64,
    /// Requests served at the same time.
    pub max_in_flight: usize,
    /// Streams of events open at the same time.
    pub max_streams: usize,
    /// Time between two signs of life on a stream of events, seconds.
    pub stream_keep_alive_seconds: u64,
    /// Memory for copies of latest forecasts, bytes.
    pub polled_bytes: usize,
    /// Time after a stop signal in which everything is still served while `/readyz` says no, seconds.
    pub drain_seconds: u64,
    /// Time to finish after that, seconds.
    pub shutdown_grace_seconds: u64,
    /// Origins whose pages may ask.
    #[serde(deserialize_with = "super::access::origins")]
    pub allowed_origins: Vec<String>,
}

impl HttpConfig {
    /// Longest time to send a request's head.
    pub fn head_timeout(&self) -> Duration {
        Duration::from_secs(self.head_timeout_seconds)
    }

    /// Longest time to send a body.
    pub fn body_timeout(&self) -> Duration {
        Duration::from_secs(self.body_timeout_seconds)
    }

    /// Longest time in which a client takes nothing of an answer worth speaking of.
    pub fn answer_pause(&self) -> Duration {
        Duration::from_secs(self.answer_pause_seconds)
    }

    /// Time between two signs of life on a stream of events.
    pub fn stream_keep_alive(&self) -> Duration {
        Duration::from_secs(self.stream_keep_alive_seconds)
    }

    /// Time after a stop signal in which everything is still served while `/readyz` says no.
    pub fn drain(&self) -> Duration {
        Duration::from_secs(self.drain_seconds)
    }

    /// Time to finish after that.
    pub fn shutdown_grace(&self) -> Duration {
        Duration::from_secs(self.shutdown_grace_seconds)
    }
}

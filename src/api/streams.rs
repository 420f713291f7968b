//! Streams of Server-Sent Events (WHATWG HTML, section 9.2): how many are open, and what all of them are like.

use std::convert::Infallible;
use std::sync::Arc;
use std::time::Duration;

use axum::http::{HeaderName, HeaderValue};
use axum::response::sse::{Event, KeepAlive, Sse};
use axum::response::{IntoResponse, Response};
use futures_util::Stream;
use tokio::sync::{OwnedSemaphorePermit, Semaphore};

use super::ApiError;
use crate::config::HttpConfig;

/// Tells nginx, and proxies that follow it, to pass events on as they come.
const UNBUFFERED: HeaderName = HeaderName::from_static("x-accel-buffering");

/// The places for streams of events. A stream stays open for as long as its client likes, so it does not count against
/// `http.max_in_flight`, whose places are given back when an answer begins.
#[derive(Debug, Clone)]
pub struct Streams {
    places: Arc<Semaphore>,
    keep_alive: Duration,
}

impl Streams {
    /// As many places as configured.
    pub fn new(config: &HttpConfig) -> Self {
        let places = Arc::new(Semaphore::new(config.max_streams.min(Semaphore::MAX_PERMITS)));
        Self { places, keep_alive: config.stream_keep_alive() }
    }

    /// A place, to be held as long as the stream is open.
    ///
    /// # Errors
    /// When all are taken.
    pub fn place(&self) -> Result<OwnedSemaphorePermit, ApiError> {
        self.places.clone().try_acquire_owned().map_err(|_| ApiError::TooManyStreams)
    }

    /// The answer that is a stream, with a comment whenever nothing was told for a while: it shows proxies that there is somebody, and
    /// us when there is nobody any more.
    pub fn answer(&self, events: impl Stream<Item = Result<Event, Infallible>> + Send + 'static) -> Response {
        let stream = Sse::new(events).keep_alive(KeepAlive::new().interval(self.keep_alive));
        ([(UNBUFFERED, HeaderValue::from_static("no"))], stream).into_response()
    }
}

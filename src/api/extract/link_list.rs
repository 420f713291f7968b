//! A link list: a body too large to hold, received piece by piece.

use std::time::Instant;

use axum::body::Body;
use axum::extract::{FromRequest, Request};
use axum::http::HeaderMap;
use futures_util::StreamExt;
use tokio::time::timeout;

use super::body::{announced_length, encodings, media_type};
use crate::api::admission::Place;
use crate::api::{ApiError, AppState};
use crate::service::{ServiceError, Upload};

/// Media types of link lists; which of them it is the list itself tells.
const TAKEN: [&str; 3] = ["text/csv", "application/x-ndjson", "application/ndjson"];

/// What must come of a list in each `http.body_timeout_seconds`, bytes: a byte now and then would hold a place for an hour.
const LEAST: usize = 16 * 1024;

/// A body announced as a link list, not yet received.
#[derive(Debug)]
pub struct LinkListBody {
    body: Body,
    /// The request's place among those that are served, left while the list is received.
    place: Option<Place>,
}

impl LinkListBody {
    /// Receives the whole of it.
    pub async fn receive(self, upload: &mut Upload, state: &AppState) -> Result<(), ApiError> {
        if let Some(place) = self.place {
            place.leave();
        }
        let (begun, time, limit) = (Instant::now(), state.jobs.link_list_time(), state.jobs.link_list_bytes);
        let mut pieces = self.body.into_data_stream();
        let (mut since, mut come) = (begun, 0);
        loop {
            if come >= LEAST {
                (since, come) = (Instant::now(), 0);
            }
            let pause = state.http.body_timeout();
            let left = time.saturating_sub(begun.elapsed()).min(pause.saturating_sub(since.elapsed()));
            let piece = match timeout(left, pieces.next()).await {
                Ok(Some(Ok(piece))) => piece,
                Ok(Some(Err(_))) => return Err(ApiError::BodyBroken),
                Ok(None) => return Ok(()),
                Err(_) if begun.elapsed() >= time => return Err(ApiError::BodyTooSlow { limit: time }),
                Err(_) => return Err(ApiError::BodyPaused { limit: pause }),
            };
            come += piece.len();
            if upload.bytes() + piece.len() as u64 > limit {
                return Err(ApiError::ListTooLarge { limit });
            }
            upload.write(&piece).await.map_err(ServiceError::from)?;
        }
    }
}

impl FromRequest<AppState> for LinkListBody {
    type Rejection = ApiError;

    async fn from_request(request: Request, state: &AppState) -> Result<Self, ApiError> {
        if !media_type(request.headers()).is_some_and(|essence| TAKEN.contains(&essence.as_str())) {
            let taken = "a link list: CSV (text/csv) or one JSON object a line (application/x-ndjson)";
            return Err(ApiError::UnsupportedMediaType { taken });
        }
        if !is_readable(request.headers()) {
            return Err(ApiError::EncodedBody { gzip: true });
        }
        let limit = state.jobs.link_list_bytes;
        if announced_length(request.headers()).is_some_and(|length| length > limit) {
            return Err(ApiError::ListTooLarge { limit });
        }
        let place = request.extensions().get().cloned();
        Ok(Self { body: request.into_body(), place })
    }
}

/// Whether the body comes as it is, or compressed once with gzip.
fn is_readable(headers: &HeaderMap) -> bool {
    let coded: Vec<_> = encodings(headers).collect();
    match coded.as_slice() {
        [] => true,
        [encoding] => encoding.eq_ignore_ascii_case(b"gzip") || encoding.eq_ignore_ascii_case(b"x-gzip"),
        _ => false,
    }
}

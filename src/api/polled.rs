//! Copies of the latest forecasts that are polled, in the form in which they leave.
//!
//! A copy is used as it is while this process has written nothing of its network since it was looked up, for at most
//! [`UNCHECKED`]; then one row of the database says whether it still holds. So a change is seen by the first read after it is
//! acknowledged, and a change by another process within that time.

use std::collections::HashMap;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, PoisonError, RwLock};
use std::time::{Duration, Instant};

use axum::body::{Body, Bytes};
use axum::http::{HeaderMap, HeaderValue, Method, StatusCode, Uri, header};
use axum::response::Response;

use super::access::Access;
use super::extract::{ForecastForm, ResultFormat};
use super::networks::{LATEST_ROUTE, polled_network};
use super::observe::{Observation, leave_room};
use super::representation::{self, Validator, entity_tag, header_value, is_unmodified};
use super::{ApiError, forecasts, jobs, runs};
use crate::service::{LatestStamp, NetworkName, PolledForecast, RefreshState, Service, StoredRun, WriteCounts};

/// Longest time for which a copy is used without asking the database.
const UNCHECKED: Duration = Duration::from_secs(1);
/// What a copy takes besides its document, bytes, about.
const FRAME_BYTES: usize = 2048;

/// The copies, and where new ones come from.
#[derive(Debug, Clone)]
pub struct Polled {
    inner: Arc<Inner>,
}

#[derive(Debug)]
struct Inner {
    service: Service,
    counts: Arc<WriteCounts>,
    copies: RwLock<HashMap<String, Arc<PolledCopy>>>,
    most_bytes: usize,
    begun: Instant,
}

/// One network's latest forecast.
#[derive(Debug)]
pub struct PolledCopy {
    run: Arc<StoredRun>,
    stamp: LatestStamp,
    /// Validator of the JSON.
    tag: String,
    json: Bytes,
    /// Headers of an answer with the JSON, of one without, and of another form besides its own.
    with_json: HeaderMap,
    without: HeaderMap,
    beside: HeaderMap,
    /// The network's count of writes, and when, at the last look.
    writes: AtomicU64,
    checked: AtomicU64,
    used: AtomicU64,
}

/// A kept document as bytes, without another copy of it.
struct Document(Arc<StoredRun>);

impl AsRef<[u8]> for Document {
    fn as_ref(&self) -> &[u8] {
        self.0.document.as_bytes()
    }
}

impl Polled {
    /// No copies yet, and at most `most_bytes` of them.
    pub fn new(service: Service, most_bytes: usize) -> Self {
        let (counts, begun) = (service.write_counts(), Instant::now());
        Self { inner: Arc::new(Inner { service, counts, copies: RwLock::default(), most_bytes, begun }) }
    }

    /// The whole answer to a poll of a copy that holds by somebody who may read it: no route is looked for, nothing is read and nothing is computed. None when the
    /// request is another one, or the copy must be looked up first.
    pub fn at_once(&self, method: &Method, uri: &Uri, headers: &HeaderMap, access: &Access) -> Option<Response> {
        if *method != Method::GET || uri.query().is_some() || !takes_json(headers) {
            return None;
        }
        let network = polled_network(uri.path())?;
        let started = Instant::now();
        let copy = self.inner.holding(network, started)?;
        // Last, for it counts.
        let standing = access.at_once(network, uri, headers)?;
        let mut response = copy.json(headers);
        access.tell_at_once(&standing, &mut response);
        Observation::begin(started, method, LATEST_ROUTE, uri.path(), headers).finish(&mut response);
        Some(response)
    }

    /// A network's copy, made or looked up where that is needed.
    ///
    /// # Errors
    /// When there is no latest forecast, or the database fails.
    pub async fn copy(&self, name: &NetworkName) -> Result<Arc<PolledCopy>, ApiError> {
        let inner = &*self.inner;
        if let Some(copy) = inner.holding(name.as_str(), Instant::now()) {
            return Ok(copy);
        }
        // Before the look: what is written meanwhile makes the copy one to be looked up again.
        let (writes, now) = (inner.counts.of(name.as_str()), inner.now(Instant::now()));
        if let Some(copy) = inner.find(name.as_str())
            && inner.service.latest_stamp(name).await?.as_ref() == Some(&copy.stamp)
        {
            copy.writes.store(writes, Ordering::Relaxed);
            copy.checked.store(now, Ordering::Relaxed);
            copy.used.store(now, Ordering::Relaxed);
            return Ok(copy);
        }
        match inner.service.polled_forecast(name).await {
            Ok(found) => {
                let copy = Arc::new(PolledCopy::new(found, writes, now)?);
                inner.keep(name.as_str(), copy.clone());
                Ok(copy)
            }
            Err(error) => {
                inner.forget(name.as_str());
                Err(error.into())
            }
        }
    }
}

impl Inner {
    /// A copy that can be used as it is.
    fn holding(&self, network: &str, at: Instant) -> Option<Arc<PolledCopy>> {
        let copy = self.find(network)?;
        let now = self.now(at);
        let age = now.saturating_sub(copy.checked.load(Ordering::Relaxed));
        // First the count, which is raised after the write: a copy of this count was read after it.
        if copy.writes.load(Ordering::Relaxed) != self.counts.of(network) || age >= UNCHECKED.as_millis() as u64 {
            return None;
        }
        copy.used.store(now, Ordering::Relaxed);
        Some(copy)
    }

    fn find(&self, network: &str) -> Option<Arc<PolledCopy>> {
        self.copies.read().unwrap_or_else(PoisonError::into_inner).get(network).cloned()
    }

    /// Keeps a copy, and lets go of those not asked for longest where there is no room.
    fn keep(&self, network: &str, copy: Arc<PolledCopy>) {
        let mut copies = self.copies.write().unwrap_or_else(PoisonError::into_inner);
        copies.remove(network);
        let size = copy.size();
        if size > self.most_bytes {
            return;
        }
        let taken: usize = copies.values().map(|copy| copy.size()).sum();
        let excess = (taken + size).saturating_sub(self.most_bytes);
        let uses = copies.iter().map(|(name, copy)| (name.clone(), copy.size(), copy.used.load(Ordering::Relaxed)));
        for name in longest_unused(uses.collect(), excess) {
            copies.remove(&name);
        }
        copies.insert(network.to_owned(), copy);
    }

    fn forget(&self, network: &str) {
        self.copies.write().unwrap_or_else(PoisonError::into_inner).remove(network);
    }

    /// Milliseconds since the beginning.
    fn now(&self, at: Instant) -> u64 {
        at.saturating_duration_since(self.begun).as_millis() as u64 // 2^64 ms are 584 million years
    }
}

impl PolledCopy {
    fn new(found: PolledForecast, writes: u64, now: u64) -> Result<Self, ApiError> {
        let PolledForecast { forecast, stamp, unasked } = found;
        let mut beside = HeaderMap::new();
        let place = header_value(&format!("{}/{}", forecasts::PATH, forecast.run.id))?;
        beside.insert(header::CONTENT_LOCATION, place);
        beside.insert("forecast-state", HeaderValue::from_static(forecast.state.as_str()));
        let refresh = format!("<{}/{}>; rel=\"describedby\"", jobs::PATH, forecast.job);
        beside.insert(header::LINK, header_value(&refresh)?);
        beside.insert(header::CACHE_CONTROL, cache_control(forecast.state, unasked)?);
        let run = Arc::new(forecast.run);
        let validator = Validator { tag: &run.tag, modified: Some(run.created_at) };
        let represented = representation::represented(validator, ResultFormat::Json, Body::empty())?;
        let mut with_json = represented.headers().clone();
        with_json.extend(beside.clone());
        leave_room(&mut with_json);
        let mut without = with_json.clone();
        without.remove(header::CONTENT_TYPE);
        Ok(Self {
            tag: entity_tag(&run.tag, ResultFormat::Json),
            json: Bytes::from_owner(Document(run.clone())),
            run,
            stamp,
            with_json,
            without,
            beside,
            writes: writes.into(),
            checked: now.into(),
            used: now.into(),
        })
    }

    /// The answer in a form.
    ///
    /// # Errors
    /// When the form cannot be made of the kept document.
    pub async fn answer(&self, form: ForecastForm, asked: &HeaderMap) -> Result<Response, ApiError> {
        if form.format() == ResultFormat::Json {
            return Ok(self.json(asked));
        }
        let mut response = runs::found((*self.run).clone(), form, asked).await?;
        response.headers_mut().extend(self.beside.clone());
        Ok(response)
    }

    fn json(&self, asked: &HeaderMap) -> Response {
        let unmodified = is_unmodified(asked, &self.tag, Some(self.run.created_at));
        let (headers, body) = match unmodified {
            true => (&self.without, Body::empty()),
            false => (&self.with_json, Body::from(self.json.clone())),
        };
        let mut response = Response::new(body);
        *response.headers_mut() = headers.clone();
        if unmodified {
            *response.status_mut() = StatusCode::NOT_MODIFIED;
        }
        response
    }

    fn size(&self) -> usize {
        self.json.len() + FRAME_BYTES
    }
}

/// Which copies (name, size, last use) to let go of for `excess` bytes.
fn longest_unused(mut copies: Vec<(String, usize, u64)>, mut excess: usize) -> Vec<String> {
    copies.sort_by_key(|(_, _, used)| *used);
    let needed = copies.into_iter().take_while(|(_, size, _)| {
        let needed = excess > 0;
        excess = excess.saturating_sub(*size);
        needed
    });
    needed.map(|(name, _, _)| name).collect()
}

/// Whether a client takes JSON rather than anything else, told without weighing what it likes: most say so.
fn takes_json(headers: &HeaderMap) -> bool {
    let mut accepted = headers.get_all(header::ACCEPT).iter();
    match (accepted.next(), accepted.next()) {
        (None, _) => true,
        (Some(only), None) => matches!(only.as_bytes(), b"*/*" | b"application/json"),
        _ => false,
    }
}

/// How long a cache may go on without asking.
fn cache_control(state: RefreshState, unasked: Duration) -> Result<HeaderValue, ApiError> {
    match (state, unasked.as_secs()) {
        (RefreshState::Refreshing, _) | (_, 0) => Ok(HeaderValue::from_static("private, no-cache")),
        (_, seconds) => header_value(&format!("private, max-age={seconds}, must-revalidate")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_was_not_asked_for_longest_makes_room() {
        let copies = || vec![("a".to_owned(), 10, 3), ("b".to_owned(), 10, 1), ("c".to_owned(), 10, 2)];
        for (excess, gone) in [(0, &[][..]), (1, &["b"]), (10, &["b"]), (11, &["b", "c"]), (99, &["b", "c", "a"])] {
            assert_eq!(longest_unused(copies(), excess), gone, "{excess}");
        }
    }

    #[test]
    fn what_a_plain_client_accepts_is_seen_at_once() {
        let with = |texts: &[&'static str]| {
            let accept = texts.iter().map(|&text| (header::ACCEPT, HeaderValue::from_static(text)));
            takes_json(&accept.collect())
        };
        assert!(with(&[]) && with(&["*/*"]) && with(&["application/json"]));
        assert!(!with(&["text/csv"]) && !with(&["*/*", "text/csv"]) && !with(&["application/json;q=0.5, text/csv"]));
    }
}

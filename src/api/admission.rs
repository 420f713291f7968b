//! Admission: which requests are served, and how much memory their bodies and answers may take meanwhile.

use std::collections::HashSet;
use std::pin::Pin;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::task::{Context, Poll, ready};
use std::time::Duration;

use axum::body::{Body, Bytes, HttpBody};
use axum::extract::{Request, State};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};
use hyper::body::{Frame, SizeHint};
use tokio::sync::{OwnedSemaphorePermit, Semaphore};

use tokio::time::timeout;

use super::ApiError;
use crate::config::{HttpConfig, JobsConfig};
use crate::service::Service;

/// What budgets are counted in, bytes.
const PAGE: usize = 1024;
/// Answers up to this size take no memory of the budget: that of their connections is as large.
const SMALL_ANSWER: u64 = 64 * 1024;

/// Places for requests, and memory for what they bring and take.
#[derive(Clone)]
pub struct Admission {
    /// Reads have places of their own: those who compute do not keep out those who look.
    reads: Arc<Semaphore>,
    others: Arc<Semaphore>,
    bodies: Budget,
    answers: Budget,
    /// How long an answer that must be given may wait for memory.
    patience: Duration,
    service: Service,
}

/// Places for link lists under way: as many as may be at work and wait, and one a network. They are received for as long as
/// `jobs.link_list_seconds`, which would keep other writes out of their places.
#[derive(Debug, Clone)]
pub struct Uploads {
    free: Arc<Semaphore>,
    networks: Arc<Mutex<HashSet<String>>>,
    service: Service,
}

/// A list's place until dropped.
#[derive(Debug)]
pub struct Upload {
    network: String,
    uploads: Uploads,
    _free: OwnedSemaphorePermit,
}

/// A request's place, which it may leave before it is answered.
#[derive(Debug, Clone)]
pub struct Place(Arc<Mutex<Option<OwnedSemaphorePermit>>>);

/// A bounded number of bytes.
#[derive(Debug, Clone)]
struct Budget {
    pages: Arc<Semaphore>,
    most: u32,
}

/// The memory that one request's body takes, until the request is answered.
#[derive(Clone)]
pub struct Held {
    taken: Arc<Mutex<Option<OwnedSemaphorePermit>>>,
    admission: Admission,
}

impl Admission {
    /// As configured.
    pub fn new(config: &HttpConfig, service: Service) -> Self {
        let places = || Arc::new(Semaphore::new(config.max_in_flight.min(Semaphore::MAX_PERMITS)));
        let (bodies, answers) = (Budget::of(config.bodies_bytes), Budget::of(config.answers_bytes));
        Self { reads: places(), others: places(), bodies, answers, patience: config.answer_pause(), service }
    }

    /// The refusal of what there is no room for.
    pub fn full(&self) -> ApiError {
        ApiError::Full { wait: self.service.backlog() }
    }
}

impl Uploads {
    /// As configured.
    pub fn new(config: &JobsConfig, service: Service) -> Self {
        let most = config.workers.saturating_add(config.queue).clamp(1, Semaphore::MAX_PERMITS);
        Self { free: Arc::new(Semaphore::new(most)), networks: Arc::default(), service }
    }

    /// A place for a network's list.
    ///
    /// # Errors
    /// When all are taken, or another list of the network is under way.
    pub fn begin(&self, network: &str) -> Result<Upload, ApiError> {
        let full = || ApiError::Full { wait: self.service.backlog() };
        let free = self.free.clone().try_acquire_owned().map_err(|_| full())?;
        if !self.networks().insert(network.to_owned()) {
            return Err(full());
        }
        Ok(Upload { network: network.to_owned(), uploads: self.clone(), _free: free })
    }

    fn networks(&self) -> MutexGuard<'_, HashSet<String>> {
        // The set is whole between any two statements, whoever panicked in between.
        self.networks.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl Drop for Upload {
    fn drop(&mut self) {
        self.uploads.networks().remove(&self.network);
    }
}

impl Place {
    /// Gives the place to others.
    pub fn leave(&self) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).take();
    }
}

/// Turns a request away at once when all places are taken.
pub async fn admit(State(admission): State<Admission>, mut request: Request, next: Next) -> Response {
    let repeatable = request.method().is_safe();
    let places = if repeatable { &admission.reads } else { &admission.others };
    let Ok(place) = places.clone().try_acquire_owned() else { return admission.full().into_response() };
    let place = Place(Arc::new(Mutex::new(Some(place))));
    request.extensions_mut().insert(place.clone());
    let held = Held { taken: Arc::default(), admission: admission.clone() };
    request.extensions_mut().insert(held.clone());
    let response = next.run(request).await;
    drop(held);
    let size = response.body().size_hint().exact().unwrap_or_default();
    if size <= SMALL_ANSWER {
        return response;
    }
    let pages = admission.answers.pages(size);
    let free = admission.answers.pages.clone();
    match free.clone().try_acquire_many_owned(pages) {
        Ok(memory) => response.map(|body| Body::new(Counted { body, memory: Arc::new(memory) })),
        Err(_) if repeatable => admission.full().into_response(),
        // What it tells of is done, and not to be asked for again. It lets others into its place and waits for as long as a slow reader
        // may be quiet; then it leaves all the same: it is in memory already.
        Err(_) => {
            place.leave();
            match timeout(admission.patience, free.acquire_many_owned(pages)).await {
                Ok(Ok(memory)) => response.map(|body| Body::new(Counted { body, memory: Arc::new(memory) })),
                _ => response,
            }
        }
    }
}

impl Budget {
    fn of(bytes: usize) -> Self {
        let most = u32::try_from(bytes.div_ceil(PAGE)).unwrap_or(u32::MAX);
        Self { pages: Arc::new(Semaphore::new(most as usize)), most }
    }

    /// Pages for so many bytes; what is larger than the whole budget takes all of it.
    fn pages(&self, bytes: u64) -> u32 {
        u32::try_from(bytes.div_ceil(PAGE as u64)).unwrap_or(u32::MAX).min(self.most)
    }
}

impl Held {
    /// Holds memory for so many bytes in all.
    ///
    /// # Errors
    /// When there is none left; what is held stays held until the request is answered.
    pub fn grow_to(&self, bytes: usize) -> Result<(), ApiError> {
        let bodies = &self.admission.bodies;
        let wanted = bodies.pages(bytes as u64);
        let mut taken = self.taken.lock().unwrap_or_else(PoisonError::into_inner);
        let held = taken.as_ref().map_or(0, OwnedSemaphorePermit::num_permits);
        let more = (wanted as usize).saturating_sub(held);
        if more == 0 {
            return Ok(());
        }
        // At most what the budget has, which is 32 bits.
        let more = u32::try_from(more).unwrap_or(u32::MAX);
        let Ok(more) = bodies.pages.clone().try_acquire_many_owned(more) else { return Err(self.admission.full()) };
        match taken.as_mut() {
            Some(taken) => taken.merge(more),
            None => *taken = Some(more),
        }
        Ok(())
    }
}

/// An answer whose bytes hold their memory until the last of them has left: the server lets go of a body when it has taken the bytes,
/// which a slow client may keep waiting long after.
struct Counted {
    body: Body,
    memory: Arc<OwnedSemaphorePermit>,
}

/// Bytes with what they hold.
struct CountedBytes {
    bytes: Bytes,
    _memory: Arc<OwnedSemaphorePermit>,
}

impl AsRef<[u8]> for CountedBytes {
    fn as_ref(&self) -> &[u8] {
        &self.bytes
    }
}

impl HttpBody for Counted {
    type Data = Bytes;
    type Error = axum::Error;

    fn poll_frame(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
    ) -> Poll<Option<Result<Frame<Bytes>, axum::Error>>> {
        let frame = ready!(Pin::new(&mut self.body).poll_frame(context));
        let memory = &self.memory;
        Poll::Ready(frame.map(|frame| {
            let counted = |bytes| Bytes::from_owner(CountedBytes { bytes, _memory: memory.clone() });
            frame.map(|frame| frame.map_data(counted))
        }))
    }

    fn is_end_stream(&self) -> bool {
        self.body.is_end_stream()
    }

    fn size_hint(&self) -> SizeHint {
        self.body.size_hint()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn an_answer_holds_its_memory_until_its_last_byte_is_let_go() {
        let budget = Budget::of(10 * PAGE);
        let memory = budget.pages.clone().try_acquire_many_owned(budget.pages(3 * PAGE as u64)).unwrap();
        let mut body = Counted { body: Body::from(vec![7; 3 * PAGE]), memory: Arc::new(memory) };
        assert_eq!(body.size_hint().exact(), Some(3 * PAGE as u64), "its length is told as before");
        let mut context = Context::from_waker(std::task::Waker::noop());
        let Poll::Ready(Some(Ok(frame))) = Pin::new(&mut body).poll_frame(&mut context) else { panic!("a frame") };
        drop(body);
        let bytes = frame.into_data().unwrap();
        assert_eq!((bytes.len(), bytes[0], budget.pages.available_permits()), (3 * PAGE, 7, 7));
        drop(bytes);
        assert_eq!(budget.pages.available_permits(), 10);
    }

    #[test]
    fn what_is_larger_than_all_there_is_takes_all() {
        let budget = Budget::of(10 * PAGE - 1);
        assert_eq!([1, PAGE as u64, PAGE as u64 + 1, u64::MAX].map(|bytes| budget.pages(bytes)), [1, 1, 2, 10]);
    }
}

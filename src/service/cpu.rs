//! Computing off the async runtime: a fixed number of workers, a bounded queue, a time budget.

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::thread::available_parallelism;
use std::time::{Duration, Instant};

use metrics::{gauge, histogram};
use tokio::sync::Semaphore;
use tokio::time::timeout_at;
use tracing::{Instrument, Span, info_span};

use super::background::{give_way, in_background};
use super::{ServiceError, TRACES};
use crate::config::ComputeConfig;

/// Workers for computations.
#[derive(Debug, Clone)]
pub struct CpuPool {
    size: usize,
    /// Workers and queue.
    most: usize,
    workers: Arc<Semaphore>,
    /// Workers and queue together: who finds no place here is turned away at once.
    places: Arc<Semaphore>,
    budget: Duration,
    stopping: Arc<AtomicBool>,
    /// What a computation takes, microseconds: a mean in which each one counts an eighth.
    usual: Arc<AtomicU64>,
}

/// Raises its flag when the caller stops waiting.
struct CancelOnDrop(Arc<AtomicBool>);

/// Counts as busy while it lives.
struct Gauged;

impl Gauged {
    fn new() -> Self {
        gauge!("tailcast_compute_busy").increment(1.0);
        Self
    }
}

impl Drop for Gauged {
    fn drop(&mut self) {
        gauge!("tailcast_compute_busy").decrement(1.0);
    }
}

impl Drop for CancelOnDrop {
    fn drop(&mut self) {
        self.0.store(true, Ordering::Relaxed);
    }
}

impl CpuPool {
    /// A pool as configured.
    pub fn new(config: &ComputeConfig) -> Self {
        let cores = available_parallelism().map_or(1, usize::from);
        let workers = if config.workers == 0 { cores } else { config.workers };
        let size = workers.min(Semaphore::MAX_PERMITS);
        let most = workers.saturating_add(config.queue).min(Semaphore::MAX_PERMITS);
        Self {
            size,
            most,
            workers: Arc::new(Semaphore::new(size)),
            places: Arc::new(Semaphore::new(most)),
            budget: config.budget(),
            stopping: Arc::new(AtomicBool::new(false)),
            usual: Arc::default(),
        }
    }

    /// Runs `work` on a worker; `work` asks its argument, between steps, whether to give up. The caller going away
    /// counts as giving up.
    ///
    /// # Errors
    /// [`ServiceError::Busy`] when the queue is full, [`ServiceError::TooSlow`] when the budget ran out,
    /// [`ServiceError::Broken`] when `work` panicked.
    pub async fn run<T: Send + 'static>(
        &self,
        work: impl FnOnce(&dyn Fn() -> bool) -> T + Send + 'static,
    ) -> Result<T, ServiceError> {
        let too_slow = || ServiceError::TooSlow { budget: self.budget };
        let place = self.places.clone().try_acquire_owned().map_err(|_| self.busy())?;
        let (asked, deadline) = (Instant::now(), far_enough(self.budget));
        let busy = Gauged::new();
        let waiting = self.workers.clone().acquire_owned().instrument(info_span!(target: TRACES, "wait for a worker"));
        let worker = match timeout_at(deadline.into(), waiting).await {
            Ok(Ok(worker)) => worker,
            Ok(Err(_)) => return Err(self.busy()),
            Err(_) => return Err(too_slow()),
        };
        histogram!("tailcast_compute_wait_seconds").record(asked.elapsed());
        let given_up = Arc::new(AtomicBool::new(false));
        let guard = CancelOnDrop(given_up.clone());
        let (stopping, usual) = (self.stopping.clone(), self.usual.clone());
        let span = Span::current();
        let computing = info_span!(target: TRACES, parent: &span, "compute");
        let task = in_background(move || {
            // Held until the work has really stopped, so that abandoned work still counts against the cores.
            let _held = (place, worker, busy);
            let begun = Instant::now();
            let cancelled = || {
                give_way();
                given_up.load(Ordering::Relaxed) || stopping.load(Ordering::Relaxed) || Instant::now() >= deadline
            };
            let outcome = span.in_scope(|| computing.in_scope(|| work(&cancelled)));
            histogram!("tailcast_compute_seconds").record(begun.elapsed());
            note_usual(&usual, begun.elapsed());
            outcome
        });
        let outcome = timeout_at(deadline.into(), task).await;
        drop(guard);
        match outcome {
            Ok(Ok(value)) => Ok(value),
            Ok(Err(error)) => Err(ServiceError::Broken(format!("a computation stopped short: {error}"))),
            Err(_) => Err(too_slow()),
        }
    }

    /// About how long it takes until what waits now is done: when to try again, whole seconds, at least one and at most the budget.
    pub fn backlog(&self) -> Duration {
        let free = self.places.available_permits().min(self.most);
        let usual = Duration::from_micros(self.usual.load(Ordering::Relaxed));
        let rounds = (self.most - free).div_ceil(self.size);
        let seconds = usual.saturating_mul(u32::try_from(rounds).unwrap_or(u32::MAX)).as_secs_f64().ceil();
        Duration::from_secs(seconds as u64).clamp(Duration::from_secs(1), self.budget.max(Duration::from_secs(1)))
    }

    fn busy(&self) -> ServiceError {
        ServiceError::Busy { wait: self.backlog() }
    }

    /// Computations at the same time.
    pub fn workers(&self) -> usize {
        self.size
    }

    /// Computations at work and waiting.
    pub fn most(&self) -> usize {
        self.most
    }

    /// The time one request may wait and compute.
    pub fn budget(&self) -> Duration {
        self.budget
    }

    /// Tells running work to give up, for good.
    pub fn stop(&self) {
        self.stopping.store(true, Ordering::Relaxed);
    }
}

fn note_usual(usual: &AtomicU64, taken: Duration) {
    let taken = u64::try_from(taken.as_micros()).unwrap_or(u64::MAX);
    // Two at once may count as one: it is an estimate.
    let before = usual.load(Ordering::Relaxed);
    usual.store(if before == 0 { taken } else { before - before / 8 + taken / 8 }, Ordering::Relaxed);
}

/// The moment `budget` from now; a budget beyond what a clock can say is a year.
fn far_enough(budget: Duration) -> Instant {
    let now = Instant::now();
    now.checked_add(budget).unwrap_or(now + Duration::from_secs(365 * 86_400))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pool(workers: usize, queue: usize, budget_seconds: u64) -> CpuPool {
        CpuPool::new(&ComputeConfig { workers, queue, budget_seconds })
    }

    /// Work that ends only when told to.
    fn until_cancelled(cancelled: &dyn Fn() -> bool) {
        while !cancelled() {
            std::thread::sleep(Duration::from_millis(1));
        }
    }

    #[tokio::test]
    async fn work_beyond_the_queue_is_turned_away_and_the_rest_run_out_of_budget() {
        let pool = pool(1, 1, 1);
        let running = tokio::spawn({
            let pool = pool.clone();
            async move { pool.run(until_cancelled).await }
        });
        tokio::time::sleep(Duration::from_millis(50)).await;
        let waiting = tokio::spawn({
            let pool = pool.clone();
            async move { pool.run(until_cancelled).await }
        });
        tokio::time::sleep(Duration::from_millis(50)).await;
        assert!(matches!(pool.run(until_cancelled).await, Err(ServiceError::Busy { .. })));
        assert!(matches!(running.await.unwrap(), Err(ServiceError::TooSlow { .. }) | Ok(())));
        assert!(matches!(waiting.await.unwrap(), Err(ServiceError::TooSlow { .. }) | Ok(())));
        assert!(pool.run(|_| 7).await.is_ok_and(|value| value == 7), "a place is free again");
    }

    #[tokio::test]
    async fn the_caller_going_away_stops_the_work() {
        let pool = pool(1, 0, 60);
        let abandoned = tokio::time::timeout(Duration::from_millis(50), pool.run(until_cancelled)).await;
        assert!(abandoned.is_err());
        tokio::time::sleep(Duration::from_millis(100)).await;
        assert!(pool.run(|_| ()).await.is_ok());
    }

    #[tokio::test]
    async fn a_panic_in_the_work_is_an_error_of_ours() {
        let outcome = pool(1, 0, 60).run(|_| -> u8 { std::panic::resume_unwind(Box::new("broken")) }).await;
        assert!(matches!(outcome, Err(ServiceError::Broken(_))));
    }
}

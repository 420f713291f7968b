//! Work that takes processor time, off the async runtime: on threads of lower priority, so that whatever answers at once goes before it.

use std::cell::Cell;
use std::io;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::mpsc::{SendError, Sender, channel};
use std::sync::{LazyLock, Mutex, MutexGuard, Once, PoisonError};
use std::thread::{Builder, available_parallelism, yield_now};
use std::time::{Duration, Instant};

use tokio::sync::{Semaphore, oneshot};

/// How far the threads step back, as the system counts niceness (0 to 19). With nothing beside them they have a processor all the
/// same; beside a thread that does not step back, a seventieth of one.
#[cfg(target_os = "linux")]
const NICENESS: i32 = 19;

/// How long a thread that computes goes on before it asks whether another waits for its processor. By itself the system may notice
/// that no sooner than its next tick, 4 ms, and a poll goes through several threads.
const STRETCH: Duration = Duration::from_micros(250);

thread_local! {
    static GAVE_WAY: Cell<Option<Instant>> = const { Cell::new(None) };
}

static CORES: LazyLock<usize> = LazyLock::new(|| available_parallelism().map_or(1, usize::from));

/// Conversions at the same time, in the whole process: more than there are cores only takes more memory.
static CONVERSIONS: LazyLock<Semaphore> = LazyLock::new(|| Semaphore::new(*CORES));

/// Work that came to no end.
#[derive(Debug, thiserror::Error)]
pub enum Unfinished {
    /// The system has no thread to give.
    #[error("no thread could be started: {0}")]
    NoThread(io::Error),
    /// It panicked.
    #[error("it panicked")]
    Panicked,
}

/// Threads that have stepped back and wait for work, the one that worked last at the end: what it needs is still near.
static WAITING: Mutex<Vec<Sender<Work>>> = Mutex::new(Vec::new());

type Work = Box<dyn FnOnce() + Send>;

/// Runs `work` on a thread that does nothing else meanwhile. It goes on to its end when the caller goes away.
///
/// # Errors
/// When there is no thread, or `work` panics.
pub async fn in_background<T: Send + 'static>(work: impl FnOnce() -> T + Send + 'static) -> Result<T, Unfinished> {
    let (tell, told) = oneshot::channel();
    hand_over(Box::new(move || {
        // A panic drops `tell`. Nobody listens when the caller went away.
        if let Ok(outcome) = catch_unwind(AssertUnwindSafe(work)) {
            let _ = tell.send(outcome);
        }
    }))
    .map_err(Unfinished::NoThread)?;
    told.await.map_err(|_| Unfinished::Panicked)
}

/// To a thread that waits, or else to a new one. A thread that stepped back may not step forward again, so none is
/// borrowed from the runtime; and a new one begins with an empty heap and far caches, which costs an eighth of a
/// millisecond.
fn hand_over(mut work: Work) -> io::Result<()> {
    while let Some(thread) = waiting().pop() {
        match thread.send(work) {
            Ok(()) => return Ok(()),
            Err(SendError(unsent)) => work = unsent,
        }
    }
    let (thread, inbox) = channel();
    let first = move || {
        step_back();
        work();
        // As many wait as can work at the same time.
        while wait_with(&thread) {
            match inbox.recv() {
                Ok(work) => work(),
                Err(_) => return,
            }
        }
    };
    Builder::new().name("compute".to_owned()).spawn(first).map(drop)
}

fn waiting() -> MutexGuard<'static, Vec<Sender<Work>>> {
    WAITING.lock().unwrap_or_else(PoisonError::into_inner)
}

/// Puts a thread among those that wait, if there is need of it.
fn wait_with(thread: &Sender<Work>) -> bool {
    let mut waiting = waiting();
    let wanted = waiting.len() < *CORES;
    if wanted {
        waiting.push(thread.clone());
    }
    wanted
}

/// The same for what takes milliseconds and is asked for by many at once (bodies read, documents drawn): as many at a time as there
/// are cores.
///
/// # Errors
/// Those of `in_background`.
pub async fn converted<T: Send + 'static>(work: impl FnOnce() -> T + Send + 'static) -> Result<T, Unfinished> {
    // It is never closed.
    let place = CONVERSIONS.acquire().await.ok();
    in_background(move || {
        // Given back when the work has ended, whether or not its caller waited.
        let _place = place;
        work()
    })
    .await
}

/// Lets whatever waits for this processor have it, now and then: long work calls it whenever it asks whether to give up.
pub fn give_way() {
    let now = Instant::now();
    let due = |last: Instant| now.saturating_duration_since(last) >= STRETCH;
    if GAVE_WAY.get().is_none_or(due) {
        GAVE_WAY.set(Some(now));
        yield_now();
    }
}

#[cfg(target_os = "linux")]
fn step_back() {
    static TOLD: Once = Once::new();
    // Of this thread alone: Linux keeps a niceness a thread. Where it is refused, the work is done all the same.
    if let Err(error) = rustix::process::setpriority_process(None, NICENESS) {
        TOLD.call_once(|| {
            tracing::warn!(%error, "computing threads may not take a lower priority (setpriority); probes and polls may wait for them");
        });
    }
}

/// Elsewhere niceness is the whole process's.
#[cfg(not(target_os = "linux"))]
fn step_back() {}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn a_panic_is_told_and_takes_nothing_along() {
        let panics = || -> u8 { std::panic::resume_unwind(Box::new("broken")) };
        assert!(matches!(in_background(panics).await, Err(Unfinished::Panicked)));
        for _ in 0..100 {
            assert!(matches!(converted(panics).await, Err(Unfinished::Panicked)));
        }
        assert_eq!(converted(|| 7).await.unwrap(), 7);
    }

    #[cfg(target_os = "linux")]
    #[tokio::test]
    async fn the_work_steps_back_and_the_runtime_does_not() {
        let niceness = || rustix::process::getpriority_process(None).unwrap();
        let before = niceness();
        assert_eq!(in_background(niceness).await.unwrap(), before.max(NICENESS));
        assert_eq!(niceness(), before);
    }
}

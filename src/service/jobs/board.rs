//! Which jobs are at work in this process, how far they have come, and which were called off.

use std::collections::HashMap;
use std::collections::hash_map::Entry;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use tokio::sync::{Notify, OwnedSemaphorePermit, Semaphore, watch};
use uuid::Uuid;

use crate::config::JobsConfig;
use crate::service::background::give_way;
use crate::store::JobKind;

/// Smallest step of progress that is told.
const STEP: f64 = 0.002;

/// The live jobs of this process.
#[derive(Debug, Clone)]
pub struct Board {
    inner: Arc<Inner>,
}

#[derive(Debug)]
struct Inner {
    live: Mutex<HashMap<Uuid, Arc<Live>>>,
    workers: Arc<Semaphore>,
    /// Refreshes have workers of their own: dashboards do not wait for somebody's long list.
    refreshers: Arc<Semaphore>,
    stopping: AtomicBool,
    config: JobsConfig,
}

#[derive(Debug)]
struct Live {
    progress: watch::Sender<f64>,
    called_off: AtomicBool,
    /// Wakes a job that waits for its turn in vain.
    wake: Notify,
}

/// A job's place on the board, given back when dropped: its watchers learn then that it has ended.
#[derive(Debug)]
pub struct Turn {
    id: Uuid,
    live: Arc<Live>,
    board: Arc<Inner>,
}

/// The side of a job that its work sees.
#[derive(Debug)]
pub struct Progress {
    live: Arc<Live>,
    board: Arc<Inner>,
}

/// Why work is to stop.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stop {
    /// The job was called off.
    CalledOff,
    /// The process stops.
    Process,
}

impl Board {
    /// An empty board.
    pub fn new(config: JobsConfig) -> Self {
        let workers = Arc::new(Semaphore::new(config.workers.min(Semaphore::MAX_PERMITS)));
        let refreshers = Arc::new(Semaphore::new(config.refresh_workers.min(Semaphore::MAX_PERMITS)));
        let (live, stopping) = (Mutex::default(), AtomicBool::new(false));
        Self { inner: Arc::new(Inner { live, workers, refreshers, stopping, config }) }
    }

    /// The settings.
    pub fn config(&self) -> &JobsConfig {
        &self.inner.config
    }

    /// Most jobs that may be live at once, refreshes not counted.
    pub fn most_live(&self) -> u64 {
        self.inner.config.workers.saturating_add(self.inner.config.queue) as u64
    }

    /// A place for a job; none when it has one.
    pub fn open(&self, id: Uuid) -> Option<Turn> {
        let live = Arc::new(Live {
            progress: watch::Sender::new(0.0),
            called_off: AtomicBool::new(false),
            wake: Notify::new(),
        });
        match self.inner.live().entry(id) {
            Entry::Occupied(_) => None,
            Entry::Vacant(place) => {
                place.insert(live.clone());
                Some(Turn { id, live, board: self.inner.clone() })
            }
        }
    }

    /// How far a live job has come; closed when it ends.
    pub fn watch(&self, id: Uuid) -> Option<watch::Receiver<f64>> {
        self.inner.live().get(&id).map(|live| live.progress.subscribe())
    }

    /// Tells a job to stop at its next step.
    pub fn call_off(&self, id: Uuid) {
        if let Some(live) = self.inner.live().get(&id) {
            live.called_off.store(true, Ordering::Relaxed);
            live.wake.notify_one();
        }
    }

    /// Tells every job to stop at its next step, to be taken up again by the next process.
    pub fn stop(&self) {
        self.inner.stopping.store(true, Ordering::Relaxed);
        self.inner.live().values().for_each(|live| live.wake.notify_one());
    }
}

impl Inner {
    fn live(&self) -> MutexGuard<'_, HashMap<Uuid, Arc<Live>>> {
        // The map is whole between any two statements, whoever panicked in between.
        self.live.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl Turn {
    /// Waits for a free worker; none when there is nothing to wait for any more.
    pub async fn come(&self, kind: JobKind) -> Option<OwnedSemaphorePermit> {
        let workers = match kind {
            JobKind::Refresh => &self.board.refreshers,
            JobKind::LinkList | JobKind::Backtest => &self.board.workers,
        };
        tokio::select! {
            worker = workers.clone().acquire_owned() => worker.ok(),
            () = self.live.wake.notified() => None,
        }
    }

    /// How far the job has come, 0 to 1.
    pub fn so_far(&self) -> f64 {
        *self.live.progress.borrow()
    }

    /// Whether the process stops.
    pub fn is_stopping(&self) -> bool {
        self.board.stopping.load(Ordering::Relaxed)
    }

    /// The side that the work sees.
    pub fn progress(&self) -> Progress {
        Progress { live: self.live.clone(), board: self.board.clone() }
    }
}

impl Drop for Turn {
    fn drop(&mut self) {
        self.board.live().remove(&self.id);
    }
}

impl Progress {
    /// Notes how far the work has come, 0 to 1.
    ///
    /// # Errors
    /// When it is to stop.
    pub fn note(&self, progress: f64) -> Result<(), Stop> {
        self.stop().map_or(Ok(()), Err)?;
        self.live.progress.send_if_modified(|told| {
            let step = progress - *told >= STEP;
            if step {
                *told = progress;
            }
            step
        });
        Ok(())
    }

    /// Why the work is to stop, if it is. Long work asks often, so this is where its thread gives way.
    pub fn stop(&self) -> Option<Stop> {
        give_way();
        if self.live.called_off.load(Ordering::Relaxed) {
            return Some(Stop::CalledOff);
        }
        self.board.stopping.load(Ordering::Relaxed).then_some(Stop::Process)
    }
}

#[cfg(test)]
mod tests {
    use std::time::Duration;

    use tokio::time::timeout;

    use super::*;

    fn board() -> Board {
        let (link_list_bytes, link_list_seconds, link_list_nodes) = (1, 1, 1);
        Board::new(JobsConfig {
            workers: 1,
            refresh_workers: 1,
            refresh_seconds: 1,
            queue: 0,
            wait_seconds: 0,
            link_list_bytes,
            link_list_seconds,
            link_list_nodes,
        })
    }

    #[tokio::test]
    async fn a_watcher_sees_progress_and_the_end() {
        let (board, id) = (board(), Uuid::now_v7());
        let turn = board.open(id).unwrap();
        assert!(board.open(id).is_none());
        let mut pulse = board.watch(id).unwrap();
        turn.progress().note(0.5).unwrap();
        turn.progress().note(0.5001).unwrap();
        pulse.changed().await.unwrap();
        assert_eq!(*pulse.borrow_and_update(), 0.5);
        drop(turn);
        assert!(pulse.changed().await.is_err());
        assert!(board.watch(id).is_none());
    }

    #[tokio::test]
    async fn a_job_that_waits_is_woken_when_it_is_called_off_or_the_process_stops() {
        let (board, ids) = (board(), [0; 3].map(|_| Uuid::now_v7()));
        let turns = ids.map(|id| board.open(id).unwrap());
        let worker = turns[0].come(JobKind::LinkList).await.unwrap();
        board.call_off(ids[1]);
        assert!(turns[1].come(JobKind::LinkList).await.is_none());
        assert_eq!(turns[1].progress().note(0.1), Err(Stop::CalledOff));
        assert!(timeout(Duration::from_millis(20), turns[2].come(JobKind::LinkList)).await.is_err(), "it waits on");
        board.stop();
        assert!(turns[2].come(JobKind::LinkList).await.is_none());
        assert_eq!(turns[0].progress().note(0.1), Err(Stop::Process));
        drop(worker);
    }
}

//! Blocks that were read in any order are counted in theirs, by whoever comes by.

use std::collections::BTreeMap;
use std::sync::{Condvar, Mutex, MutexGuard, PoisonError, RwLock, TryLockError};

use super::IngestError;
use super::batch::Batch;
use super::counter::{Counter, Counts};
use super::names::Names;

/// Batches that may wait to be counted.
const WAITING: usize = 3;

/// The counter, and the batches in front of it.
pub struct Order<'c> {
    counter: Mutex<Counter>,
    queue: Mutex<Queue>,
    /// There is room in the queue.
    room: Condvar,
    counts: &'c Counts,
}

#[derive(Default)]
struct Queue {
    waiting: BTreeMap<u64, Batch>,
    /// Place of the batch that is counted next.
    next: u64,
    spare: Vec<Batch>,
    /// No more are counted; why, unless one who reads has died.
    over: Option<Option<IngestError>>,
}

impl<'c> Order<'c> {
    /// Nothing was counted.
    pub fn new(counter: Counter, counts: &'c Counts) -> Self {
        Self { counter: Mutex::new(counter), queue: Mutex::default(), room: Condvar::new(), counts }
    }

    fn queue(&self) -> MutexGuard<'_, Queue> {
        self.queue.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Takes the batch of a place in exchange for an empty one, and counts those whose turn it is, if nobody else does.
    /// None when no more are taken.
    pub fn take(&self, place: u64, batch: Batch, names: &RwLock<Names>) -> Option<Batch> {
        self.queue().waiting.insert(place, batch);
        while self.queue().is_next_there() {
            // Who counts looks once more before leaving.
            let mut counter = match self.counter.try_lock() {
                Ok(counter) => counter,
                Err(TryLockError::WouldBlock) => break,
                Err(TryLockError::Poisoned(_)) => return None,
            };
            while let Some(mut batch) = self.next() {
                let counted = counter.take(&mut batch, names, self.counts);
                batch.clear();
                let mut queue = self.queue();
                queue.spare.push(batch);
                if let Err(error) = counted {
                    queue.over.get_or_insert(Some(error));
                    self.room.notify_all();
                }
            }
        }
        let queue = self.queue();
        let mut queue = self.room.wait_while(queue, |queue| queue.is_full()).unwrap_or_else(PoisonError::into_inner);
        if queue.over.is_some() { None } else { Some(queue.spare.pop().unwrap_or_default()) }
    }

    fn next(&self) -> Option<Batch> {
        let mut queue = self.queue();
        let was_full = queue.is_full();
        let batch = if queue.over.is_some() { None } else { queue.take_next() };
        if was_full && !queue.is_full() {
            self.room.notify_all();
        }
        batch
    }

    /// One who reads has died: nobody waits for what it had.
    pub fn give_up(&self) {
        self.queue().over.get_or_insert(None);
        self.room.notify_all();
    }

    /// The counter after the last batch; why counting has stopped, if it has.
    pub fn finish(self) -> Result<Counter, IngestError> {
        let queue = self.queue.into_inner().unwrap_or_else(PoisonError::into_inner);
        match queue.over {
            Some(error) => Err(error.unwrap_or(IngestError::Cancelled)),
            None => Ok(self.counter.into_inner().unwrap_or_else(PoisonError::into_inner)),
        }
    }
}

impl Queue {
    fn is_next_there(&self) -> bool {
        self.over.is_none() && self.waiting.contains_key(&self.next)
    }

    fn is_full(&self) -> bool {
        self.over.is_none() && self.waiting.len() > WAITING
    }

    fn take_next(&mut self) -> Option<Batch> {
        let batch = self.waiting.remove(&self.next)?;
        self.next += 1;
        Some(batch)
    }
}

#[cfg(test)]
mod tests {
    use std::thread;

    use super::*;
    use crate::ingest::{FaultPolicy, LinkListPlan};
    use crate::model::DegreeKind;

    #[test]
    fn a_fault_sends_away_all_who_wait() {
        let plan =
            LinkListPlan { kind: DegreeKind::Received, every: None, faults: FaultPolicy::Refuse, link_events: true };
        let (names, counts) = (RwLock::new(Names::default()), Counts::default());
        let order = Order::new(Counter::new(&plan), &counts);
        let (order, names) = (&order, &names);
        thread::scope(|scope| {
            let waiting: Vec<_> = (1..=2 * WAITING as u64)
                .map(|place| scope.spawn(move || order.take(place, Batch::default(), names).is_none()))
                .collect();
            while order.queue().waiting.len() < waiting.len() {
                thread::yield_now();
            }
            let faulty = |mut batch: Batch| {
                batch.end = Some(IngestError::Cancelled);
                batch
            };
            assert!(order.take(0, faulty(Batch::default()), names).is_none());
            // Those for whom there was room have gone on.
            let sent_away = waiting.into_iter().map(|thread| thread.join().unwrap()).filter(|&away| away).count();
            assert!(sent_away >= WAITING);
        });
    }
}

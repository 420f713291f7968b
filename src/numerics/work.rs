//! Counts of the work that a computation takes, on the thread that does it.
//!
//! Times depend on the machine; these do not, so that a test can hold a forecast to them (`tests/core/work.rs`).

use std::cell::Cell;

/// What is counted.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Work {
    /// Incomplete beta functions.
    BetaFunctions,
    /// Steps of a recurrence from one degree to the next.
    RecurrenceSteps,
    /// Points at which a generating function was taken, or moved to from its neighbour's.
    ContourPoints,
    /// Terms of likelihoods.
    LikelihoodTerms,
}

const KINDS: usize = 4;

thread_local! {
    static DONE: Cell<[u64; KINDS]> = const { Cell::new([0; KINDS]) };
}

/// Work done.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct WorkDone([u64; KINDS]);

impl WorkDone {
    /// How much of one kind.
    pub fn of(&self, kind: Work) -> u64 {
        self.0[kind as usize]
    }
}

/// Adds to what this thread has done.
pub(crate) fn did(kind: Work, amount: u64) {
    DONE.with(|done| {
        let mut counts = done.get();
        counts[kind as usize] = counts[kind as usize].wrapping_add(amount);
        done.set(counts);
    });
}

/// Does something, and tells what work it took on this thread.
///
/// ```
/// use tailcast::numerics::binomial::incomplete_beta;
/// use tailcast::numerics::work::{Work, counted};
/// let (_, done) = counted(|| incomplete_beta(2.0, 3.0, 0.5, 0.5));
/// assert_eq!(done.of(Work::BetaFunctions), 1);
/// ```
pub fn counted<T>(work: impl FnOnce() -> T) -> (T, WorkDone) {
    let before = DONE.get();
    let result = work();
    let after = DONE.get();
    (result, WorkDone(std::array::from_fn(|i| after[i].wrapping_sub(before[i]))))
}

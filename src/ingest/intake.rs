//! Takes lines, batch by batch, to the thread that counts them.

use std::sync::mpsc::{Receiver, SyncSender};

use foldhash::fast::RandomState;
use jiff::Timestamp;

use super::batch::Batch;
use super::clock::{Clock, why_no_time};
use super::report::{LISTED, shown};
use super::{IngestError, MAX_IDENTIFIER_BYTES};

/// The lines of a list on their way to the [`super::counter::Counter`].
pub struct Intake {
    clock: Clock,
    hasher: RandomState,
    batch: Batch,
    line: u64,
    malformed: usize,
    full: SyncSender<Batch>,
    empty: Receiver<Batch>,
}

impl Intake {
    /// A list of which nothing was read. Batches leave by `full`, and come back by `empty` to be filled again.
    pub fn new(hasher: RandomState, full: SyncSender<Batch>, empty: Receiver<Batch>) -> Self {
        Self { clock: Clock::default(), hasher, batch: Batch::default(), line: 0, malformed: 0, full, empty }
    }

    /// The current line, from 1 on.
    pub fn line(&self) -> u64 {
        self.line
    }

    /// Goes on by so many lines.
    #[inline]
    pub fn pass(&mut self, lines: u64) {
        self.line += lines;
    }

    /// Takes a link that the current line gives as texts.
    #[inline]
    pub fn link(&mut self, time: &[u8], source: &[u8], target: &[u8]) -> Result<(), IngestError> {
        match self.clock.read(time) {
            Some(time) => self.link_at(time, source, target),
            None => self.malformed(|| why_no_time(time)),
        }
    }

    /// Takes a link of the current line.
    #[inline]
    pub fn link_at(&mut self, time: Timestamp, source: &[u8], target: &[u8]) -> Result<(), IngestError> {
        for (what, name) in [("source", source), ("target", target)] {
            if name.is_empty() || name.len() > MAX_IDENTIFIER_BYTES {
                return self.malformed(|| why_no_identifier(what, name));
            }
        }
        self.batch.push(self.line, time, source, target, &self.hasher);
        if self.batch.is_full() { self.send() } else { Ok(()) }
    }

    /// The current line cannot be read.
    #[cold]
    pub fn malformed(&mut self, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        // No more reasons are told than are listed.
        let reason = if self.malformed < LISTED { reason() } else { String::new() };
        self.malformed += 1;
        self.batch.push_malformed(self.line, reason);
        if self.batch.is_full() { self.send() } else { Ok(()) }
    }

    /// Hands on what waits.
    ///
    /// # Errors
    /// When counting has stopped; why is the counter's to tell.
    pub fn send(&mut self) -> Result<(), IngestError> {
        if self.batch.is_empty() {
            return Ok(());
        }
        let next = self.empty.try_recv().unwrap_or_default();
        let batch = std::mem::replace(&mut self.batch, next);
        self.full.send(batch).map_err(|_| IngestError::Cancelled)
    }
}

fn why_no_identifier(what: &str, name: &[u8]) -> String {
    match name {
        [] => format!("its {what} is empty"),
        _ => format!(
            "its {what}, {}, has {} bytes; an identifier has at most {MAX_IDENTIFIER_BYTES}",
            shown(name),
            name.len()
        ),
    }
}

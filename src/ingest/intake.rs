//! Takes what lines say into a batch.

use foldhash::fast::RandomState;
use jiff::Timestamp;

use super::MAX_IDENTIFIER_BYTES;
use super::batch::Batch;
use super::clock::{Clock, why_no_time};
use super::report::{LISTED, shown};

/// The lines of a list on their way to the [`super::counter::Counter`].
pub struct Intake {
    /// What they make.
    pub batch: Batch,
    clock: Clock,
    hasher: RandomState,
    malformed: usize,
}

impl Intake {
    /// Nothing was read.
    pub fn new(hasher: RandomState) -> Self {
        Self { batch: Batch::default(), clock: Clock::default(), hasher, malformed: 0 }
    }

    /// Goes on by so many lines.
    #[inline]
    pub fn pass(&mut self, lines: u32) {
        self.batch.lines += lines;
    }

    /// Takes a link that the current line gives as texts.
    #[inline]
    pub fn link(&mut self, time: &[u8], source: &[u8], target: &[u8]) {
        match self.clock.read(time) {
            Some(time) => self.link_at(time, source, target),
            None => self.malformed(|| why_no_time(time)),
        }
    }

    /// Takes a link of the current line.
    #[inline]
    pub fn link_at(&mut self, time: Timestamp, source: &[u8], target: &[u8]) {
        for (what, name) in [("source", source), ("target", target)] {
            if name.is_empty() || name.len() > MAX_IDENTIFIER_BYTES {
                return self.malformed(|| why_no_identifier(what, name));
            }
        }
        self.batch.push(time, source, target, &self.hasher);
    }

    /// The current line cannot be read.
    #[cold]
    pub fn malformed(&mut self, reason: impl FnOnce() -> String) {
        // No more reasons are told than are listed.
        let reason = if self.malformed < LISTED { reason() } else { String::new() };
        self.malformed += 1;
        self.batch.push_malformed(reason);
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

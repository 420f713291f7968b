//! The links of one block, on their way to the census.
//!
//! Nearly all the time of counting is spent waiting for memory, where each identifier is looked up. The look-ups of a
//! batch do not depend on each other, so the processor waits for many of them at once.

use std::sync::{PoisonError, RwLock};

use foldhash::fast::RandomState;
use jiff::Timestamp;

use super::IngestError;
use super::names::{Names, hash};

/// Links looked up at a time: what they need stays near from one pass to the next.
const LINKS: usize = 256;

/// A link as a line gives it.
#[derive(Debug, Clone, Copy)]
pub struct Link<'b> {
    /// Number of the line in its block, from 1 on.
    pub line: u32,
    /// Its time.
    pub time: Timestamp,
    /// Where it comes from.
    pub source: Name<'b>,
    /// Where it lands.
    pub target: Name<'b>,
}

/// An identifier of a batch.
#[derive(Debug, Clone, Copy)]
pub struct Name<'b> {
    /// Its bytes.
    pub text: &'b [u8],
    /// Its hash.
    pub hash: u32,
    /// Its number, if it had one when the batch was looked up.
    pub number: Option<u32>,
}

impl Name<'_> {
    /// Whether it is the same identifier.
    #[inline]
    pub fn is(&self, other: &Self) -> bool {
        match (self.number, other.number) {
            (Some(one), Some(other)) => one == other,
            _ => self.text == other.text,
        }
    }
}

/// Reads values that nobody needs yet, so that they are near when they are needed.
#[inline]
pub fn bring_near(values: impl Iterator<Item = u32>) {
    std::hint::black_box(values.fold(0, u32::wrapping_add));
}

/// What is kept of a line.
#[derive(Debug)]
struct Line {
    line: u32,
    time: Timestamp,
    /// Source and target.
    ends: [Found; 2],
}

/// What is kept of an identifier.
#[derive(Debug, Clone, Copy)]
struct Found {
    /// Where it ends in the batch's text.
    end: u32,
    hash: u32,
    /// Where it may be kept, then its number.
    known: Option<u32>,
}

/// A line that cannot be read.
#[derive(Debug)]
pub struct Malformed {
    /// Links of the batch that come before it.
    pub after: usize,
    /// Number of the line in its block, from 1 on.
    pub line: u32,
    /// What is wrong; empty where nobody will be told.
    pub reason: String,
}

/// Links of a block, and lines among them that are none.
#[derive(Debug, Default)]
pub struct Batch {
    links: Vec<Line>,
    malformed: Vec<Malformed>,
    text: Vec<u8>,
    /// Lines of the block.
    pub lines: u32,
    /// Why the list cannot be read beyond these lines, with the number of the line in its block.
    pub end: Option<IngestError>,
}

impl Batch {
    /// Adds a link of the current line.
    #[inline]
    pub fn push(&mut self, time: Timestamp, source: &[u8], target: &[u8], hasher: &RandomState) {
        let ends = [source, target].map(|name| {
            self.text.extend_from_slice(name);
            // A block has a MiB at most.
            Found { end: self.text.len() as u32, hash: hash(hasher, name), known: None }
        });
        self.links.push(Line { line: self.lines, time, ends });
    }

    /// Adds the current line, which cannot be read.
    pub fn push_malformed(&mut self, reason: String) {
        self.malformed.push(Malformed { after: self.links.len(), line: self.lines, reason });
    }

    /// Looks up the identifiers that have a number. Each pass waits for one kind of memory only; between passes, others
    /// may add names.
    pub fn look_up(&mut self, names: &RwLock<Names>) {
        let mut start = 0;
        for links in self.links.chunks_mut(LINKS) {
            let names = names.read().unwrap_or_else(PoisonError::into_inner);
            for found in links.iter_mut().flat_map(|line| &mut line.ends) {
                found.known = names.candidate(found.hash);
            }
            let places = links.iter().flat_map(|line| &line.ends).filter_map(|found| found.known);
            bring_near(places.map(|place| names.touch(place).into()));
            for found in links.iter_mut().flat_map(|line| &mut line.ends) {
                let text = self.text.get(start..found.end as usize).unwrap_or_default();
                found.known = found.known.and_then(|place| names.confirm(place, text));
                start = found.end as usize;
            }
        }
    }

    /// The numbers of the targets that have one, after [`Self::look_up`].
    pub fn targets(&self) -> impl Iterator<Item = u32> {
        self.links.iter().filter_map(|line| line.ends[1].known)
    }

    /// The links, in the order of their lines.
    pub fn links(&self) -> impl Iterator<Item = Link<'_>> {
        let mut start = 0;
        self.links.iter().map(move |line| {
            let [source, target] = line.ends.map(|found| {
                let text = self.text.get(start..found.end as usize).unwrap_or_default();
                start = found.end as usize;
                Name { text, hash: found.hash, number: found.known }
            });
            Link { line: line.line, time: line.time, source, target }
        })
    }

    /// The lines that cannot be read, in their order, as many as there are.
    pub fn malformed(&self) -> &[Malformed] {
        &self.malformed
    }

    /// Forgets everything.
    pub fn clear(&mut self) {
        self.links.clear();
        self.malformed.clear();
        self.text.clear();
        self.lines = 0;
        self.end = None;
    }
}

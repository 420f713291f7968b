//! Links on their way to the census, a few hundred at a time.
//!
//! Nearly all the time of counting is spent waiting for memory, where each identifier is looked up. The look-ups of a
//! batch do not depend on each other, so the processor waits for many of them at once.

use foldhash::fast::RandomState;
use jiff::Timestamp;

use super::names::{Names, hash};

/// Links of one batch.
const LINKS: usize = 256;

/// A link as a line gives it.
#[derive(Debug, Clone, Copy)]
pub struct Link<'b> {
    /// Number of the line.
    pub line: u64,
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
    hash: u32,
    /// Its number, if it had one when the batch was looked up.
    number: Option<u32>,
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

    /// Its number, a new one if it has none yet.
    #[inline]
    pub fn number(&self, names: &mut Names) -> Option<u32> {
        self.number.or_else(|| names.number(self.text, self.hash))
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
    line: u64,
    time: Timestamp,
    /// Source and target.
    ends: [Found; 2],
}

/// What is kept of an identifier.
#[derive(Debug, Clone, Copy)]
struct Found {
    /// Where it ends in the batch's text.
    end: usize,
    hash: u32,
    /// Where it may be kept, then its number.
    known: Option<u32>,
}

/// A line that cannot be read.
#[derive(Debug)]
pub struct Malformed {
    /// Links of the batch that come before it.
    pub after: usize,
    /// Number of the line.
    pub line: u64,
    /// What is wrong; empty where nobody will be told.
    pub reason: String,
}

/// Links that wait, and lines among them that are none.
#[derive(Debug, Default)]
pub struct Batch {
    lines: Vec<Line>,
    malformed: Vec<Malformed>,
    text: Vec<u8>,
}

impl Batch {
    /// Adds a link.
    #[inline]
    pub fn push(&mut self, line: u64, time: Timestamp, source: &[u8], target: &[u8], hasher: &RandomState) {
        let ends = [source, target].map(|name| {
            self.text.extend_from_slice(name);
            Found { end: self.text.len(), hash: hash(hasher, name), known: None }
        });
        self.lines.push(Line { line, time, ends });
    }

    /// Adds a line that cannot be read.
    pub fn push_malformed(&mut self, line: u64, reason: String) {
        self.malformed.push(Malformed { after: self.lines.len(), line, reason });
    }

    /// Whether nothing waits.
    pub fn is_empty(&self) -> bool {
        self.lines.is_empty() && self.malformed.is_empty()
    }

    /// Whether it is time to count them.
    #[inline]
    pub fn is_full(&self) -> bool {
        self.lines.len() + self.malformed.len() >= LINKS
    }

    /// Looks up the identifiers that have a number. Each pass waits for one kind of memory only.
    pub fn look_up(&mut self, names: &Names) {
        for found in self.lines.iter_mut().flat_map(|line| &mut line.ends) {
            found.known = names.candidate(found.hash);
        }
        let places = self.lines.iter().flat_map(|line| &line.ends).filter_map(|found| found.known);
        bring_near(places.map(|place| names.touch(place).into()));
        let mut start = 0;
        for found in self.lines.iter_mut().flat_map(|line| &mut line.ends) {
            let text = self.text.get(start..found.end).unwrap_or_default();
            found.known = found.known.and_then(|place| names.confirm(place, text));
            start = found.end;
        }
    }

    /// The numbers of the targets that have one, after [`Self::look_up`].
    pub fn targets(&self) -> impl Iterator<Item = u32> {
        self.lines.iter().filter_map(|line| line.ends[1].known)
    }

    /// The links, in the order of their lines.
    pub fn links(&self) -> impl Iterator<Item = Link<'_>> {
        let mut start = 0;
        self.lines.iter().map(move |line| {
            let [source, target] = line.ends.map(|found| {
                let text = self.text.get(start..found.end).unwrap_or_default();
                start = found.end;
                Name { text, hash: found.hash, number: found.known }
            });
            Link { line: line.line, time: line.time, source, target }
        })
    }

    /// The lines that cannot be read, in their order.
    pub fn malformed(&self) -> &[Malformed] {
        &self.malformed
    }

    /// Forgets everything.
    pub fn clear(&mut self) {
        self.lines.clear();
        self.malformed.clear();
        self.text.clear();
    }
}

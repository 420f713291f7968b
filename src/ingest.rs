//! From bytes to link events: reads a time-ordered link list and counts it.
//!
//! A list is CSV (RFC 4180) whose header names the columns `time`, `source` and `target`, or one JSON object with those
//! keys a line; either may be compressed with gzip. Other columns and keys are passed over. An identifier is any text
//! but an empty one; in JSON it may be an integer too, which is the same as its digits. A time is RFC 3339, a bare date
//! (00:00 UTC) or seconds since 1970.

mod batch;
mod blocks;
mod clock;
mod counter;
mod csv;
mod intake;
mod names;
mod ndjson;
mod order;
mod reading;
mod report;
mod source;

use std::io::{self, Read};
use std::ops::ControlFlow;
use std::sync::{Mutex, PoisonError, RwLock};
use std::thread;

use jiff::Span;

use crate::census::{CensusError, Tally};
use crate::model::DegreeKind;
use counter::{Counter, Counts};
use intake::Intake;
use names::Names;
use order::Order;
use reading::{Reader, Reading};
use source::Source;

pub use report::{FaultyLines, LinkFault, LinkReport};

/// Longest line, bytes.
pub const MAX_LINE_BYTES: usize = 1 << 20;
/// Longest identifier, bytes.
pub const MAX_IDENTIFIER_BYTES: usize = 1 << 10;

/// What to do with a faulty line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FaultPolicy {
    /// Stop at the first.
    Refuse,
    /// Pass over it and report it.
    Skip,
}

/// How to count a list.
#[derive(Debug, Clone, Copy)]
pub struct LinkListPlan {
    /// What a degree counts.
    pub kind: DegreeKind,
    /// Period of the snapshots; none for the last state alone.
    pub every: Option<Span>,
    /// What to do with faulty lines.
    pub faults: FaultPolicy,
    /// Whether attachment statistics are wanted besides the counts.
    pub link_events: bool,
}

/// How far the reading has come.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Progress {
    /// Bytes read, compressed ones as they are.
    pub bytes: u64,
    /// Links counted.
    pub links: u64,
    /// Nodes met.
    pub nodes: u64,
}

/// Why a list could not be counted.
#[derive(Debug, thiserror::Error)]
pub enum IngestError {
    /// The bytes could not be read.
    #[error("reading stopped after line {line}: {error}")]
    Read {
        /// Last line read.
        line: u64,
        /// Why.
        error: io::Error,
    },
    /// The compressed bytes are broken.
    #[error("the gzip data break off or are damaged after line {line} ({error}); compress the list anew")]
    Gzip {
        /// Last line read.
        line: u64,
        /// Why.
        error: io::Error,
    },
    /// The compressed bytes expand beyond all measure.
    #[error(
        "the gzip data expand to more than {} times their size after line {line}, which no list of links does; send the list as it is",
        source::MOST_EXPANSION
    )]
    Expanding {
        /// Last line read.
        line: u64,
    },
    /// The columns are not told.
    #[error("line {line}: {reason}")]
    Header {
        /// The line that should be the header.
        line: u64,
        /// What is wrong and how to mend it.
        reason: String,
    },
    /// A faulty line, where none is accepted.
    #[error("line {line}: {reason}")]
    Faulty {
        /// The line.
        line: u64,
        /// Kind of fault.
        fault: LinkFault,
        /// What is wrong and how to mend it.
        reason: String,
    },
    /// No line could be counted.
    #[error("no link was counted: of {} lines, {} are faulty", .0.lines, .0.faults())]
    NoLink(Box<LinkReport>),
    /// The links are beyond what a census holds.
    #[error("line {line}: {error}")]
    Census {
        /// The line.
        line: u64,
        /// Why.
        error: CensusError,
    },
    /// The caller asked to stop.
    #[error("counting was stopped")]
    Cancelled,
}

impl IngestError {
    /// The same in a block that `lines` come before.
    fn after(self, lines: u64) -> Self {
        match self {
            Self::Read { line, error } => Self::Read { line: lines + line, error },
            Self::Gzip { line, error } => Self::Gzip { line: lines + line, error },
            Self::Expanding { line } => Self::Expanding { line: lines + line },
            Self::Header { line, reason } => Self::Header { line: lines + line, reason },
            other => other,
        }
    }
}

/// Most threads that read and look up lines, since one alone counts; more than two were not measured.
const MOST_READERS: usize = 4;

/// Reads and counts a list. `watch` is called after each block of bytes, and stops the counting if it says so.
///
/// Blocks are read, and their identifiers looked up, on as many threads as there are cores, up to four; they are counted
/// in order.
///
/// ```
/// use std::ops::ControlFlow;
/// use tailcast::ingest::{FaultPolicy, LinkListPlan, count_links};
/// use tailcast::model::DegreeKind;
/// let list = "time,source,target\n2026-01-01,ana,ben\n2026-01-02,cai,ben\n";
/// let plan =
///     LinkListPlan { kind: DegreeKind::Received, every: None, faults: FaultPolicy::Refuse, link_events: true };
/// let (tally, report) = count_links(list.as_bytes(), &plan, &mut |_| ControlFlow::Continue(())).unwrap();
/// assert_eq!(report.links, 2);
/// assert_eq!(tally.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 2), (2, 1)]);
/// ```
///
/// # Errors
/// Bytes that cannot be read, a header without the columns, no link at all, `watch` saying stop; with
/// [`FaultPolicy::Refuse`] the first faulty line.
pub fn count_links(
    input: impl Read + Send,
    plan: &LinkListPlan,
    watch: &mut (dyn FnMut(Progress) -> ControlFlow<()> + Send),
) -> Result<(Tally, LinkReport), IngestError> {
    let source = Source::open(input).map_err(|error| IngestError::Read { line: 0, error })?;
    let (names, counts) = (Names::default(), Counts::default());
    let hasher = names.hasher();
    // Shortens how long it is borrowed to that of the crew.
    let mut watch = watch;
    let crew = Crew {
        reading: Mutex::new(Reading::new(source, &mut watch, &counts)),
        names: RwLock::new(names),
        order: Order::new(Counter::new(plan), &counts),
    };
    let readers = thread::available_parallelism().map_or(1, usize::from).min(MOST_READERS);
    thread::scope(|scope| {
        let work = || crew.work(Reader::new(Intake::new(hasher.clone())));
        for _ in 1..readers {
            scope.spawn(work);
        }
        work();
    });
    crew.order.finish()?.finish()
}

/// What the threads share.
struct Crew<'l> {
    reading: Mutex<Reading<'l>>,
    names: RwLock<Names>,
    order: Order<'l>,
}

impl Crew<'_> {
    /// Reads blocks until there are no more.
    fn work(&self, mut reader: Reader) {
        let _leaving = Leaving(&self.order);
        loop {
            let place = self.reading.lock().unwrap_or_else(PoisonError::into_inner).hand_out(&mut reader);
            let Some(place) = place else { return };
            reader.read_block();
            let mut batch = std::mem::take(&mut reader.intake.batch);
            batch.look_up(&self.names);
            match self.order.take(place, batch, &self.names) {
                Some(spare) => reader.intake.batch = spare,
                None => return,
            }
        }
    }
}

/// Tells the others when one dies, so that they do not wait for ever.
struct Leaving<'c>(&'c Order<'c>);

impl Drop for Leaving<'_> {
    fn drop(&mut self) {
        if thread::panicking() {
            self.0.give_up();
        }
    }
}

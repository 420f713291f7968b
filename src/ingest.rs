//! From bytes to link events: reads a time-ordered link list and counts it.
//!
//! A list is CSV (RFC 4180) whose header names the columns `time`, `source` and `target`, or one JSON object with those
//! keys a line; either may be compressed with gzip. Other columns and keys are passed over. An identifier is any text
//! but an empty one; in JSON it may be an integer too, which is the same as its digits. A time is RFC 3339, a bare date
//! (00:00 UTC) or seconds since 1970.

mod batch;
mod clock;
mod counter;
mod csv;
mod intake;
mod lines;
mod names;
mod ndjson;
mod report;
mod source;

use std::io::{self, Read};
use std::ops::ControlFlow;
use std::sync::atomic::Ordering;
use std::sync::mpsc::{channel, sync_channel};
use std::thread;

use jiff::Span;

use crate::census::{CensusError, Tally};
use crate::model::DegreeKind;
use counter::{Counter, Counts};
use intake::Intake;
use lines::Lines;
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

/// Batches of lines that may wait to be counted.
const WAITING: usize = 32;

/// Reads and counts a list: lines are read on this thread, and counted on one beside it. `watch` is called after each block of bytes, and stops the counting if it says so.
///
/// ```
/// use std::ops::ControlFlow;
/// use tailcast::ingest::{FaultPolicy, LinkListPlan, count_links};
/// use tailcast::model::DegreeKind;
/// let list = "time,source,target\n2026-01-01,ana,ben\n2026-01-02,cai,ben\n";
/// let plan = LinkListPlan { kind: DegreeKind::Received, every: None, faults: FaultPolicy::Refuse };
/// let (tally, report) = count_links(list.as_bytes(), &plan, &mut |_| ControlFlow::Continue(())).unwrap();
/// assert_eq!(report.links, 2);
/// assert_eq!(tally.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 2), (2, 1)]);
/// ```
///
/// # Errors
/// Bytes that cannot be read, a header without the columns, no link at all, `watch` saying stop; with
/// [`FaultPolicy::Refuse`] the first faulty line.
pub fn count_links(
    input: impl Read,
    plan: &LinkListPlan,
    watch: &mut dyn FnMut(Progress) -> ControlFlow<()>,
) -> Result<(Tally, LinkReport), IngestError> {
    let (counter, counts) = (Counter::new(plan), Counts::default());
    thread::scope(|scope| {
        let ((full, batches), (emptied, empty)) = (sync_channel(WAITING), channel());
        let intake = Intake::new(counter.hasher(), full, empty);
        let counting = scope.spawn(|| counter.run(batches, emptied, &counts));
        let read = read_all(input, intake, &counts, watch);
        // What stopped the counting is in an earlier line than what stopped the reading.
        let counter = counting.join().unwrap_or_else(|panic| std::panic::resume_unwind(panic))?;
        counter.finish(read?)
    })
}

/// Reads a list to its end; returns the number of its last line.
fn read_all(
    input: impl Read,
    mut intake: Intake,
    counts: &Counts,
    watch: &mut dyn FnMut(Progress) -> ControlFlow<()>,
) -> Result<u64, IngestError> {
    let source = Source::open(input).map_err(|error| IngestError::Read { line: 0, error })?;
    let mut lines = Lines::new(source);
    let mut format = None;
    loop {
        let more = lines.fill().map_err(|error| lines.source().fault(intake.line(), error))?;
        let (links, nodes) = (counts.links.load(Ordering::Relaxed), counts.nodes.load(Ordering::Relaxed));
        if watch(Progress { bytes: lines.source().bytes(), links, nodes }).is_break() {
            return Err(IngestError::Cancelled);
        }
        let format = format.get_or_insert_with(|| Format::of(lines.unread()));
        let read = format.read(lines.unread(), !more, &mut intake)?;
        if read == 0 && lines.is_full() {
            intake.pass(1);
            intake.malformed(|| format!("it is longer than {MAX_LINE_BYTES} bytes"))?;
            lines.skip_line();
        } else {
            lines.consume(read);
        }
        intake.send()?;
        if !more {
            return Ok(intake.line());
        }
    }
}

/// How the lines are written.
enum Format {
    Csv(Box<csv::Columns>),
    Ndjson,
}

impl Format {
    /// The format of a list that begins so: a header does not start with a brace.
    fn of(start: &[u8]) -> Self {
        match start.trim_ascii_start().first() {
            Some(b'{') => Self::Ndjson,
            _ => Self::Csv(Box::default()),
        }
    }

    /// Counts the complete lines of a block; returns how many bytes they take.
    fn read(&mut self, block: &[u8], last: bool, intake: &mut Intake) -> Result<usize, IngestError> {
        match self {
            Self::Csv(columns) => columns.read(block, last, intake),
            Self::Ndjson => ndjson::read(block, last, intake),
        }
    }
}

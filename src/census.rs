//! From link events to evidence: one pass over a time-ordered link list, in memory that follows nodes, never links.
//!
//! A link runs source → target; with links received its target gains an end, with total degree both its nodes do. A
//! node arrives at the time of its first link. Ends it gains at that very instant are its degree on entry; ends that
//! come later, or to nodes that were there before the instant, are landings. Nobody departs. A pair that is linked again
//! at a later time counts as another link.

mod attachment;
mod cadence;
mod cells;
mod instant;
mod ratios;

use jiff::{Span, Timestamp};

use crate::model::{DegreeKind, Evidence, EvidenceFault, LinkEvents, Snapshot, Transitions};
use attachment::Attachment;
use cadence::Cadence;
use instant::Pairs;

/// Counts links as they come.
///
/// Nodes are numbered in order of arrival: a node not seen before has the next free number, the source's before the
/// target's.
///
/// ```
/// use tailcast::census::{Census, Verdict};
/// use tailcast::model::DegreeKind;
/// let mut census = Census::new(DegreeKind::Received, None);
/// let day = |text: &str| format!("{text}T00:00:00Z").parse::<jiff::Timestamp>().unwrap();
/// assert_eq!(census.record(day("2026-01-01"), 0, 1).unwrap(), Verdict::Counted);
/// assert_eq!(census.record(day("2026-01-02"), 2, 1).unwrap(), Verdict::Counted);
/// assert_eq!(census.record(day("2026-01-02"), 2, 1).unwrap(), Verdict::Repeated);
/// assert_eq!(census.record(day("2026-01-01"), 2, 0).unwrap(), Verdict::OutOfOrder);
/// let tally = census.finish().unwrap();
/// assert_eq!(tally.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 2), (2, 1)]);
/// // Node 1 had the only end of two nodes when the second link landed on it: twice the mean degree.
/// assert_eq!(tally.link_events.unwrap().ratios()[0].ratio, 2.0);
/// ```
#[derive(Debug)]
pub struct Census {
    kind: DegreeKind,
    /// Every node's degree; newcomers of the current instant stand behind the nodes present before it.
    degrees: Vec<u32>,
    present: usize,
    /// Link ends of the nodes present.
    ends: u64,
    now: Option<Timestamp>,
    links: u64,
    pairs: Pairs,
    attachment: Option<Attachment>,
    cadence: Option<Cadence>,
}

/// What became of a link. Only a counted one leaves a trace.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// It was counted.
    Counted,
    /// Its time is earlier than that of the last link counted.
    OutOfOrder,
    /// Source and target were linked at this very time already.
    Repeated,
    /// It runs from a node to itself.
    SelfLink,
}

/// Why no census could be made.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum CensusError {
    /// No link was counted.
    #[error("there is no link to count")]
    NoLink,
    /// A node's number is not the next free one.
    #[error("node {0} is neither known nor the next to arrive; number nodes in order of arrival")]
    Unnumbered(u32),
    /// More nodes or ends of one node than are counted.
    #[error("a list with more than {most} {0} is beyond what is counted here", most = u32::MAX)]
    TooMany(&'static str),
    /// The cadence makes too many snapshots.
    #[error(
        "{every} from {first} on makes more than {most} snapshots, the most that one piece of evidence holds; \
         choose a longer period"
    )]
    TooManySnapshots {
        /// The cadence.
        every: String,
        /// The boundary that it counts from.
        first: Timestamp,
        /// Most snapshots.
        most: usize,
    },
    /// The counts do not make evidence, which only a defect can cause.
    #[error("the counts do not fit together: {0}")]
    Inconsistent(String),
}

/// What a link list tells of its network.
#[derive(Debug, Clone, PartialEq)]
pub struct Tally {
    /// What a degree counts.
    pub kind: DegreeKind,
    /// Links counted.
    pub links: u64,
    /// Snapshots, oldest first; the last one at the time of the last link.
    pub snapshots: Vec<Snapshot>,
    /// The moves between each snapshot and the next.
    pub transitions: Vec<Transitions>,
    /// Attachment statistics; none when no link landed on a node that was there before, or none were asked for.
    pub link_events: Option<LinkEvents>,
}

impl Tally {
    /// All of it as evidence for a fit.
    ///
    /// # Errors
    /// When snapshots and transitions do not fit together; those of one census always do.
    pub fn into_evidence(self) -> Result<Evidence, Vec<EvidenceFault>> {
        let evidence = Evidence::new(self.kind, self.snapshots, None)?.with_transitions(self.transitions)?;
        Ok(match self.link_events {
            Some(events) => evidence.with_link_events(events),
            None => evidence,
        })
    }
}

impl Census {
    /// A census of a list that has not begun, with a snapshot `every` so often besides the one at the end.
    ///
    /// Periods are counted by the calendar from 00:00 UTC of the day of the first link. A last period shorter than half
    /// the one before is made one with it.
    pub fn new(kind: DegreeKind, every: Option<Span>) -> Self {
        Self {
            kind,
            degrees: Vec::new(),
            present: 0,
            ends: 0,
            now: None,
            links: 0,
            pairs: Pairs::default(),
            attachment: Some(Attachment::default()),
            cadence: every.map(Cadence::new),
        }
    }

    /// The same without attachment statistics.
    pub fn without_link_events(self) -> Self {
        Self { attachment: None, ..self }
    }

    /// Number of nodes so far: the number that the next newcomer gets.
    pub fn nodes(&self) -> usize {
        self.degrees.len()
    }

    /// A node's degree so far; 0 for one that has not arrived.
    #[inline]
    pub fn degree(&self, id: u32) -> u32 {
        self.degrees.get(id as usize).copied().unwrap_or(0)
    }

    /// Time of the last link counted; an earlier one is out of order.
    pub fn now(&self) -> Option<Timestamp> {
        self.now
    }

    /// Whether repeats were no longer looked for at some instant, because it had too many links to remember.
    pub fn repeats_unchecked(&self) -> bool {
        self.pairs.overflowed()
    }

    /// Counts the link from `source` to `target` at `time`.
    ///
    /// # Errors
    /// Numbers out of order of arrival; more nodes, ends or snapshots than are counted. The census is of no use then.
    #[inline]
    pub fn record(&mut self, time: Timestamp, source: u32, target: u32) -> Result<Verdict, CensusError> {
        if source == target {
            return Ok(Verdict::SelfLink);
        }
        self.check_number(source, self.degrees.len())?;
        self.check_number(target, self.degrees.len().max(source as usize + 1))?;
        if self.now.is_some_and(|now| time < now) {
            return Ok(Verdict::OutOfOrder);
        }
        if self.now != Some(time) {
            self.move_on(time)?;
        }
        if !self.pairs.is_new(source, target, self.degrees.len()) {
            return Ok(Verdict::Repeated);
        }
        let nodes = source.max(target) as usize + 1;
        if nodes > self.degrees.len() {
            self.degrees.resize(nodes, 0);
        }
        if self.kind == DegreeKind::Total {
            self.gain(source)?;
        }
        self.gain(target)?;
        self.links += 1;
        Ok(Verdict::Counted)
    }

    /// What the list tells.
    ///
    /// # Errors
    /// When no link was counted.
    pub fn finish(mut self) -> Result<Tally, CensusError> {
        let end = self.now.ok_or(CensusError::NoLink)?;
        self.join();
        let (snapshots, transitions) = match self.cadence {
            Some(cadence) => cadence.finish(end, &self.degrees)?,
            None => (vec![cadence::snapshot(end, &self.degrees)?], Vec::new()),
        };
        let link_events = self.attachment.map_or(Ok(None), Attachment::finish)?;
        Ok(Tally { kind: self.kind, links: self.links, snapshots, transitions, link_events })
    }

    fn check_number(&self, id: u32, next: usize) -> Result<(), CensusError> {
        match id {
            u32::MAX => Err(CensusError::TooMany("nodes")),
            _ if id as usize > next => Err(CensusError::Unnumbered(id)),
            _ => Ok(()),
        }
    }

    /// A new instant: the newcomers of the one before are present now, and boundaries that lie between are past.
    fn move_on(&mut self, time: Timestamp) -> Result<(), CensusError> {
        self.join();
        if let Some(cadence) = &mut self.cadence {
            cadence.reach(time, &self.degrees)?;
        }
        self.pairs.clear();
        self.now = Some(time);
        Ok(())
    }

    fn join(&mut self) {
        let Some(attachment) = &mut self.attachment else { return };
        let newcomers = self.degrees.get(self.present..).unwrap_or_default();
        for &degree in newcomers {
            self.ends += u64::from(degree);
            attachment.join(degree);
        }
        self.present = self.degrees.len();
        attachment.grown(self.present as u64, self.ends);
    }

    /// One more end for a node.
    #[inline]
    fn gain(&mut self, id: u32) -> Result<(), CensusError> {
        let degree = self.degrees.get_mut(id as usize).ok_or(CensusError::Unnumbered(id))?;
        if let Some(attachment) = &mut self.attachment
            && (id as usize) < self.present
        {
            attachment.land(*degree, self.present as u64, self.ends);
            self.ends += 1;
        }
        *degree = degree.checked_add(1).ok_or(CensusError::TooMany("ends of one node"))?;
        Ok(())
    }
}

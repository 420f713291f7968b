//! Snapshots at the boundaries of calendar periods, and the moves between them.

use std::collections::HashMap;

use foldhash::fast::RandomState;
use jiff::{Span, Timestamp, Zoned, tz::TimeZone};

use super::CensusError;
use crate::model::{DegreeCounts, MAX_SNAPSHOTS, Move, Snapshot, Transitions};

/// A boundary that was passed.
#[derive(Debug, Default)]
struct Cut {
    /// Every node's degree at the boundary, in order of arrival.
    degrees: Vec<u32>,
    /// Length of the period that ends here, nanoseconds.
    period: i128,
}

/// Cuts a list into periods.
#[derive(Debug)]
pub struct Cadence {
    every: Span,
    /// 00:00 UTC of the day of the first link.
    origin: Option<Zoned>,
    /// Periods begun.
    begun: i64,
    /// Start and end of the current period; no end where the calendar ends.
    start: Timestamp,
    end: Option<Timestamp>,
    snapshots: Vec<Snapshot>,
    transitions: Vec<Transitions>,
    last: Cut,
    before_last: Cut,
}

impl Cadence {
    /// Periods of one length, counted from the first link on.
    pub fn new(every: Span) -> Self {
        Self {
            every,
            origin: None,
            begun: 0,
            start: Timestamp::UNIX_EPOCH,
            end: None,
            snapshots: Vec::new(),
            transitions: Vec::new(),
            last: Cut::default(),
            before_last: Cut::default(),
        }
    }

    /// Links from `time` on follow; those so far made `degrees`. A boundary's snapshot holds the links of its very time.
    pub fn reach(&mut self, time: Timestamp, degrees: &[u32]) -> Result<(), CensusError> {
        if self.origin.is_none() {
            let midnight = time.to_zoned(TimeZone::UTC).start_of_day();
            let midnight = midnight.map_err(|error| CensusError::Inconsistent(error.to_string()))?;
            self.start = midnight.timestamp();
            self.origin = Some(midnight);
            self.end = self.boundary(1);
            self.begun = 1;
        }
        while let Some(end) = self.end.filter(|&end| end < time) {
            self.cut(end, degrees)?;
            self.begun += 1;
            (self.start, self.end) = (end, self.boundary(self.begun));
        }
        Ok(())
    }

    /// Counted from the origin each time: a month after 31 January is 28 February, two months after it 31 March.
    fn boundary(&self, periods: i64) -> Option<Timestamp> {
        let span = self.every.checked_mul(periods).ok()?;
        let end = self.origin.as_ref()?.checked_add(span).ok()?.timestamp();
        (end > self.start).then_some(end)
    }

    fn cut(&mut self, end: Timestamp, degrees: &[u32]) -> Result<(), CensusError> {
        // The state at the end of the list is a snapshot too.
        if self.begun >= MAX_SNAPSHOTS as i64 {
            let first = self.origin.as_ref().map_or(end, Zoned::timestamp);
            return Err(CensusError::TooManySnapshots { every: self.every.to_string(), first, most: MAX_SNAPSHOTS });
        }
        if degrees.is_empty() {
            return Ok(());
        }
        self.add(end, degrees)?;
        std::mem::swap(&mut self.last, &mut self.before_last);
        self.last.degrees.clear();
        self.last.degrees.extend_from_slice(degrees);
        self.last.period = end.as_nanosecond() - self.start.as_nanosecond();
        Ok(())
    }

    /// The snapshots with the one at `end`, the time of the last link, and the moves between them.
    pub fn finish(mut self, end: Timestamp, degrees: &[u32]) -> Result<(Vec<Snapshot>, Vec<Transitions>), CensusError> {
        let rest = self.snapshots.last().map(|last| end.as_nanosecond() - last.as_of.as_nanosecond());
        if rest.is_some_and(|rest| 2 * rest < self.last.period) {
            self.snapshots.pop();
            self.transitions.pop();
            std::mem::swap(&mut self.last, &mut self.before_last);
        }
        self.add(end, degrees)?;
        Ok((self.snapshots, self.transitions))
    }

    fn add(&mut self, as_of: Timestamp, degrees: &[u32]) -> Result<(), CensusError> {
        if let Some(last) = self.snapshots.last() {
            self.transitions.push(moves(last.as_of, as_of, &self.last.degrees, degrees)?);
        }
        self.snapshots.push(snapshot(as_of, degrees)?);
        Ok(())
    }
}

/// The degree counts of nodes with `degrees`.
pub fn snapshot(as_of: Timestamp, degrees: &[u32]) -> Result<Snapshot, CensusError> {
    let mut nodes: HashMap<u32, u64, RandomState> = HashMap::default();
    for &degree in degrees {
        *nodes.entry(degree).or_default() += 1;
    }
    let pairs: Vec<(u64, u64)> = nodes.into_iter().map(|(degree, nodes)| (degree.into(), nodes)).collect();
    match DegreeCounts::from_pairs(&pairs) {
        Ok(counts) => Ok(Snapshot { as_of, counts }),
        Err(faults) => Err(CensusError::Inconsistent(faults.iter().map(ToString::to_string).collect())),
    }
}

/// The moves of nodes that had degrees `before` and have degrees `after`, which goes on with the newcomers.
fn moves(from: Timestamp, to: Timestamp, before: &[u32], after: &[u32]) -> Result<Transitions, CensusError> {
    let mut nodes: HashMap<(Option<u32>, u32), u64, RandomState> = HashMap::default();
    let earlier = before.iter().copied().map(Some).chain(std::iter::repeat(None));
    for pair in earlier.zip(after.iter().copied()) {
        *nodes.entry(pair).or_default() += 1;
    }
    let rows: Vec<Move> = nodes
        .into_iter()
        .map(|((before, after), nodes)| Move { before: before.map(u64::from), after: Some(after.into()), nodes })
        .collect();
    Transitions::new(from, to, &rows)
        .map_err(|faults| CensusError::Inconsistent(faults.iter().map(ToString::to_string).collect()))
}

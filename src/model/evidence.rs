//! What is known of a network: its degree counts at one date or at several.

use std::fmt;

use jiff::Timestamp;

use super::{DegreeCounts, DegreeKind, EntryDegrees, LinkEvents, Transitions, days_between};

/// Most snapshots in one piece of evidence.
pub const MAX_SNAPSHOTS: usize = 1_000;

/// Degree counts at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct Snapshot {
    /// The date the counts hold for.
    pub as_of: Timestamp,
    /// The counts.
    pub counts: DegreeCounts,
}

/// What is known of one network: snapshots, oldest first, each later than the one before, never empty; where known, the
/// transitions between dates and the attachment statistics of its link list.
#[derive(Debug, Clone, PartialEq)]
pub struct Evidence {
    kind: DegreeKind,
    snapshots: Vec<Snapshot>,
    entry: Option<EntryDegrees>,
    transitions: Vec<Transitions>,
    link_events: Option<LinkEvents>,
}

/// What is wrong with a list of snapshots or of transitions, and where.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct EvidenceFault {
    /// Index of the offending item; `None` for the whole list.
    pub index: Option<usize>,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for EvidenceFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

impl Evidence {
    /// Evidence of `snapshots`, oldest first; `entry` when the caller knows the entry degrees.
    ///
    /// # Errors
    /// An empty or too long list; each snapshot that is not later than the one before it.
    pub fn new(
        kind: DegreeKind,
        snapshots: Vec<Snapshot>,
        entry: Option<EntryDegrees>,
    ) -> Result<Self, Vec<EvidenceFault>> {
        let mut faults = Vec::new();
        if snapshots.is_empty() {
            faults.push(EvidenceFault { index: None, detail: "no snapshot is given; give at least one".into() });
        }
        if snapshots.len() > MAX_SNAPSHOTS {
            let detail = format!("{} snapshots are more than the {MAX_SNAPSHOTS} one request takes", snapshots.len());
            faults.push(EvidenceFault { index: None, detail });
        }
        for (i, pair) in snapshots.windows(2).enumerate() {
            if pair[1].as_of <= pair[0].as_of {
                let detail = format!(
                    "the snapshot of {} does not come after that of {}; list snapshots oldest first, one a date",
                    pair[1].as_of, pair[0].as_of
                );
                faults.push(EvidenceFault { index: Some(i + 1), detail });
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        Ok(Self { kind, snapshots, entry, transitions: Vec::new(), link_events: None })
    }

    /// The same with `transitions`, oldest first, periods that do not overlap. Their dates become snapshots, where there is none
    /// of that date.
    ///
    /// # Errors
    /// Periods out of order or overlapping; a table whose counts at a date are not those of the snapshot of that date; a
    /// table that ends after the newest snapshot.
    pub fn with_transitions(mut self, transitions: Vec<Transitions>) -> Result<Self, Vec<EvidenceFault>> {
        let mut faults = Vec::new();
        let mut fault = |index, detail| faults.push(EvidenceFault { index: Some(index), detail });
        for (i, pair) in transitions.windows(2).enumerate() {
            if pair[1].from() < pair[0].to() {
                let detail = format!(
                    "the table from {} starts before the one before it ends ({}); list transitions oldest first, periods \
                     that do not overlap",
                    pair[1].from(),
                    pair[0].to()
                );
                fault(i + 1, detail);
            }
        }
        for (i, table) in transitions.iter().enumerate() {
            for (date, counts) in [(table.from(), table.counts_before()), (table.to(), table.counts_after())] {
                let snapshot = self.snapshots.iter().find(|snapshot| snapshot.as_of == date);
                if let Some(snapshot) = snapshot.filter(|snapshot| counts.as_ref() != Some(&snapshot.counts)) {
                    let nodes = counts.map_or(0, |counts| counts.nodes());
                    let detail = format!(
                        "at {date} the table has other degree counts than the snapshot of that date ({nodes} nodes, where the \
                         snapshot has {}); make both from the same nodes",
                        snapshot.counts.nodes()
                    );
                    fault(i, detail);
                }
            }
            if table.to() > self.latest().as_of {
                let detail = format!(
                    "the table ends at {}, after the newest snapshot ({}); add a snapshot of that date",
                    table.to(),
                    self.latest().as_of
                );
                fault(i, detail);
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        for (date, counts) in
            transitions.iter().flat_map(|t| [(t.from(), t.counts_before()), (t.to(), t.counts_after())])
        {
            let place = self.snapshots.partition_point(|snapshot| snapshot.as_of < date);
            let known = self.snapshots.get(place).is_some_and(|snapshot| snapshot.as_of == date);
            if let Some(counts) = counts.filter(|_| !known) {
                self.snapshots.insert(place, Snapshot { as_of: date, counts });
            }
        }
        self.transitions = transitions;
        Ok(self)
    }

    /// The same with the attachment statistics of the network's link list.
    pub fn with_link_events(self, link_events: LinkEvents) -> Self {
        Self { link_events: Some(link_events), ..self }
    }

    /// What a degree counts.
    pub fn kind(&self) -> DegreeKind {
        self.kind
    }

    /// The snapshots, oldest first; at least one.
    pub fn snapshots(&self) -> &[Snapshot] {
        &self.snapshots
    }

    /// The newest snapshot, from which a forecast starts.
    pub fn latest(&self) -> &Snapshot {
        &self.snapshots[self.snapshots.len() - 1]
    }

    /// Entry degrees given by the caller.
    pub fn entry(&self) -> Option<&EntryDegrees> {
        self.entry.as_ref()
    }

    /// Transitions, oldest first; may be empty.
    pub fn transitions(&self) -> &[Transitions] {
        &self.transitions
    }

    /// Attachment statistics of the network's link list, when known.
    pub fn link_events(&self) -> Option<&LinkEvents> {
        self.link_events.as_ref()
    }

    /// What was known at snapshot `newest` (an index) of the last `depth` dates: those snapshots, and the transitions between them.
    /// Link events are left out, for they do not say what was known when. All of it when there is no such snapshot.
    pub fn window(&self, newest: usize, depth: usize) -> Self {
        let end = newest.saturating_add(1).min(self.snapshots.len());
        let start = end.saturating_sub(depth.max(1));
        let snapshots = self.snapshots[start..end].to_vec();
        let (first, last) = (snapshots[0].as_of, snapshots[snapshots.len() - 1].as_of);
        let within = |table: &&Transitions| table.from() >= first && table.to() <= last;
        Self {
            kind: self.kind,
            entry: self.entry.clone(),
            transitions: self.transitions.iter().filter(within).cloned().collect(),
            snapshots,
            link_events: None,
        }
    }

    /// Consecutive snapshots with the days between them, oldest first.
    pub fn periods(&self) -> impl DoubleEndedIterator<Item = (&Snapshot, &Snapshot, f64)> {
        self.snapshots.windows(2).map(|pair| (&pair[0], &pair[1], days_between(pair[0].as_of, pair[1].as_of)))
    }
}

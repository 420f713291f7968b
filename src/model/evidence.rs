//! What is known of a network: its degree counts at one date or at several.

use std::fmt;

use jiff::Timestamp;

use super::{DegreeCounts, DegreeKind, EntryDegrees, days_between};

/// Most snapshots in one piece of evidence.
const MAX_SNAPSHOTS: usize = 1_000;

/// Degree counts at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct Snapshot {
    /// The date the counts hold for.
    pub as_of: Timestamp,
    /// The counts.
    pub counts: DegreeCounts,
}

/// Snapshots of one network, oldest first, each later than the one before; never empty.
#[derive(Debug, Clone, PartialEq)]
pub struct Evidence {
    kind: DegreeKind,
    snapshots: Vec<Snapshot>,
    entry: Option<EntryDegrees>,
}

/// What is wrong with the list of snapshots, and where.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct EvidenceFault {
    /// Index of the offending snapshot; `None` for the whole list.
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
        if faults.is_empty() { Ok(Self { kind, snapshots, entry }) } else { Err(faults) }
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

    /// Consecutive snapshots with the days between them, oldest first.
    pub fn periods(&self) -> impl DoubleEndedIterator<Item = (&Snapshot, &Snapshot, f64)> {
        self.snapshots.windows(2).map(|pair| (&pair[0], &pair[1], days_between(pair[0].as_of, pair[1].as_of)))
    }
}

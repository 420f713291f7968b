//! Transitions: how many nodes went from one degree to another between two dates.

use std::collections::BTreeMap;
use std::fmt;

use jiff::Timestamp;

use super::{DegreeCounts, MAX_DEGREE, days_between};

/// `nodes` nodes with degree `before` at the earlier date have degree `after` at the later one.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Move {
    /// Degree at the earlier date; `None` for nodes that arrived since.
    pub before: Option<u64>,
    /// Degree at the later date; `None` for nodes that departed.
    pub after: Option<u64>,
    /// How many nodes.
    pub nodes: u64,
}

/// The moves of every node between two dates, in ascending (before, after) order, each pair once.
///
/// ```
/// use tailcast::model::{Move, Transitions};
/// let moves = [
///     Move { before: Some(0), after: Some(1), nodes: 7 },
///     Move { before: None, after: Some(0), nodes: 20 },
///     Move { before: Some(3), after: None, nodes: 2 },
/// ];
/// let table = Transitions::new("2026-01-01T00:00:00Z".parse().unwrap(), "2026-02-01T00:00:00Z".parse().unwrap(), &moves).unwrap();
/// assert_eq!((table.arrived(), table.departed(), table.stayed()), (20, 2, 7));
/// assert_eq!(table.counts_before().unwrap().link_ends(), 6);
/// assert_eq!(table.days(), 31.0);
/// ```
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Transitions {
    from: Timestamp,
    to: Timestamp,
    moves: Vec<Move>,
}

/// What is wrong with a table of transitions, and where.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TransitionsFault {
    /// Index of the offending row; `None` for the whole table.
    pub index: Option<usize>,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for TransitionsFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

impl Transitions {
    /// Builds the table from rows in any order; rows with zero nodes are dropped.
    ///
    /// # Errors
    /// Every fault: a row blank at both ends, a repeated pair, a degree above 2^53 − 1, too many nodes, dates out of
    /// order, no node at the earlier date.
    pub fn new(from: Timestamp, to: Timestamp, rows: &[Move]) -> Result<Self, Vec<TransitionsFault>> {
        let mut faults = Vec::new();
        let mut fault = |index, detail| faults.push(TransitionsFault { index, detail });
        if to <= from {
            fault(None, format!("the table ends at {to}, which is not after its start, {from}"));
        }
        let mut first = BTreeMap::new();
        for (index, row) in rows.iter().enumerate() {
            if row.before.is_none() && row.after.is_none() {
                let detail = "a row without a degree before and after tells of nobody; drop it";
                fault(Some(index), detail.into());
            }
            for degree in [row.before, row.after].into_iter().flatten().filter(|&degree| degree > MAX_DEGREE) {
                fault(Some(index), format!("degree {degree} is above the largest allowed, {MAX_DEGREE} (2^53 - 1)"));
            }
            if let Some(earlier) = first.insert((row.before, row.after), index) {
                fault(
                    Some(index),
                    format!("the same pair of degrees stands in row {earlier}; add the two into one row"),
                );
            }
        }
        let total: u128 = rows.iter().map(|row| u128::from(row.nodes)).sum();
        if total > u128::from(u64::MAX) {
            fault(None, format!("the nodes add up to more than {} (2^64 - 1)", u64::MAX));
        }
        if !rows.iter().any(|row| row.before.is_some() && row.nodes > 0) {
            fault(None, "no node was there at the start; transitions need the nodes of the earlier date".into());
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        let mut moves: Vec<Move> = rows.iter().copied().filter(|row| row.nodes > 0).collect();
        moves.sort_by_key(|row| (row.before, row.after));
        Ok(Self { from, to, moves })
    }

    /// The earlier date.
    pub fn from(&self) -> Timestamp {
        self.from
    }

    /// The later date.
    pub fn to(&self) -> Timestamp {
        self.to
    }

    /// Days between the two dates.
    pub fn days(&self) -> f64 {
        days_between(self.from, self.to)
    }

    /// The moves, in ascending (before, after) order.
    pub fn moves(&self) -> &[Move] {
        &self.moves
    }

    /// Moves of nodes present at both dates: (before, after, nodes).
    pub fn stays(&self) -> impl Iterator<Item = (u64, u64, u64)> + '_ {
        self.moves.iter().filter_map(|row| Some((row.before?, row.after?, row.nodes)))
    }

    /// Newcomers by their degree at the later date: (degree, nodes).
    pub fn newcomers(&self) -> impl Iterator<Item = (u64, u64)> + '_ {
        self.moves.iter().filter(|row| row.before.is_none()).filter_map(|row| Some((row.after?, row.nodes)))
    }

    /// Nodes that departed, by their degree at the earlier date: (degree, nodes).
    pub fn departures(&self) -> impl Iterator<Item = (u64, u64)> + '_ {
        self.moves.iter().filter(|row| row.after.is_none()).filter_map(|row| Some((row.before?, row.nodes)))
    }

    /// Number of newcomers.
    pub fn arrived(&self) -> u64 {
        self.newcomers().map(|(_, nodes)| nodes).sum()
    }

    /// Number of nodes that departed.
    pub fn departed(&self) -> u64 {
        self.departures().map(|(_, nodes)| nodes).sum()
    }

    /// Number of nodes present at both dates.
    pub fn stayed(&self) -> u64 {
        self.stays().map(|(_, _, nodes)| nodes).sum()
    }

    /// Degree counts at the earlier date.
    pub fn counts_before(&self) -> Option<DegreeCounts> {
        histogram(self.moves.iter().filter_map(|row| Some((row.before?, row.nodes))))
    }

    /// Degree counts at the later date; none when every node departed.
    pub fn counts_after(&self) -> Option<DegreeCounts> {
        histogram(self.moves.iter().filter_map(|row| Some((row.after?, row.nodes))))
    }
}

fn histogram(pairs: impl Iterator<Item = (u64, u64)>) -> Option<DegreeCounts> {
    let mut counts = BTreeMap::new();
    for (degree, nodes) in pairs {
        *counts.entry(degree).or_insert(0) += nodes;
    }
    DegreeCounts::from_pairs(&counts.into_iter().collect::<Vec<_>>()).ok()
}

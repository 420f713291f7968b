//! Arrivals by the batch, for networks whose ends pick among earlier ends: what is drawn does not wait for what is read.

use rand::RngExt;
use rand::rngs::SmallRng;

/// Arrivals whose picks are drawn before the first of them lands. Memory answers many reads at once, and one by one it would be waited
/// for at every end.
pub(super) const BATCH: u64 = 64;

/// What a landing end picks by.
#[derive(Debug, Clone, Copy)]
pub(super) struct Pick {
    /// Place of an earlier end, whose node is picked too; else the node.
    place: u32,
    by_end: bool,
}

impl Pick {
    /// Draws a pick among `nodes` nodes and `ends` ends, by an end with probability `share` where there is one.
    pub fn draw(nodes: usize, ends: usize, share: f64, rng: &mut SmallRng) -> Self {
        let by_end = ends > 0 && rng.random::<f64>() < share;
        // As many as 32 bits hold: the network's room was checked.
        let place = rng.random_range(0..if by_end { ends } else { nodes }) as u32;
        Self { place, by_end }
    }

    /// The node picked.
    pub fn node(self, ends: &[u32]) -> u32 {
        if self.by_end { ends[self.place as usize] } else { self.place }
    }

    /// The same as a pick of its node where the end is there already; without a branch that would have to be guessed.
    fn read_ahead(&mut self, ends: &[u32]) {
        let known = self.by_end & ((self.place as usize) < ends.len());
        let read = ends.get(if known { self.place as usize } else { 0 }).copied().unwrap_or(0);
        self.place = if known { read } else { self.place };
        self.by_end &= !known;
    }
}

/// Arrivals that have been drawn and have not come yet.
#[derive(Debug, Default)]
pub(super) struct Batch {
    pub picks: Vec<Pick>,
    /// Landing ends and entry degree of each.
    pub arrivals: Vec<(u64, u64)>,
}

impl Batch {
    /// Lands and joins them all in order, and is empty then.
    pub fn come(&mut self, degrees: &mut Vec<u32>, ends: &mut Vec<u32>) {
        self.picks.iter_mut().for_each(|pick| pick.read_ahead(ends));
        let mut picks = self.picks.drain(..);
        for (landing, entry) in self.arrivals.drain(..) {
            for pick in picks.by_ref().take(landing as usize) {
                let node = pick.node(ends);
                degrees[node as usize] += 1;
                ends.push(node);
            }
            let node = degrees.len() as u32;
            degrees.push(entry as u32);
            ends.extend(std::iter::repeat_n(node, entry as usize));
        }
    }
}

//! Landings and exposure by degree, stretch by stretch.
//!
//! The exposure of a cell is summed without visiting it at each landing. Of L landings, a change of the cell by Δ after
//! the first ℓ of them is seen by L − ℓ, so that
//!
//! exposure = (size at the start)·L + Σ Δ·(L − ℓ) = (size at the end)·L − Σ Δ·ℓ.
//!
//! Each landing moves one node up by one degree, so the sums of ℓ over the landings on a cell and over those that leave
//! it upwards tell every Δ: what leaves a cell enters the next.

use super::CensusError;
use super::cells::Cells;
use super::ratios::Ratios;
use crate::model::{AttachmentCell, AttachmentWindow, LinkEvents};

/// A stretch ends when nodes or link ends have grown by this share.
const GROWTH: f64 = 0.03;
/// Most landings of a stretch, so that sums of ℓ fit 64 bits.
const MOST_LANDINGS: u64 = u32::MAX as u64;

/// How many, and the sum of ℓ over them.
#[derive(Debug, Clone, Copy, Default)]
struct Moves {
    count: u64,
    positions: u64,
}

/// What landed on a cell in the current stretch.
#[derive(Debug, Clone, Copy, Default)]
struct Landed {
    all: Moves,
    /// Landings on the highest degree of the cell: the node goes on to the next.
    out: Moves,
}

/// What is in a cell, and what joined it in the current stretch.
#[derive(Debug, Clone, Copy, Default)]
struct Content {
    /// At the start of the stretch.
    nodes: i128,
    ends: i128,
    joined: i128,
    joined_ends: i128,
    /// Σ ℓ over the newcomers, and over their link ends.
    joined_positions: i128,
    joined_end_positions: i128,
}

/// The attachment statistics as they grow.
#[derive(Debug)]
pub struct Attachment {
    ratios: Ratios,
    cells: Cells,
    landed: Vec<Landed>,
    contents: Vec<Content>,
    /// Landings of the current stretch.
    landings: u64,
    /// Sizes at which the current stretch ends.
    most_nodes: u64,
    most_ends: u64,
    windows: Vec<AttachmentWindow>,
}

impl Default for Attachment {
    fn default() -> Self {
        let cells = Cells::default();
        Self {
            ratios: Ratios::default(),
            landed: vec![Landed::default(); cells.len()],
            contents: vec![Content::default(); cells.len()],
            cells,
            landings: 0,
            most_nodes: 0,
            most_ends: 0,
            windows: Vec::new(),
        }
    }
}

impl Attachment {
    /// An end lands on a node of `degree`, one of `nodes` with `ends` in all.
    #[inline]
    pub fn land(&mut self, degree: u32, nodes: u64, ends: u64) {
        self.ratios.land(degree, nodes, ends);
        self.landings += 1;
        let cell = self.cells.of(degree);
        let leaves = u64::from(degree == self.cells.highest(cell));
        if let Some(landed) = self.landed.get_mut(cell) {
            landed.all.count += 1;
            landed.all.positions += self.landings;
            landed.out.count += leaves;
            landed.out.positions += leaves * self.landings;
        }
        if ends + 1 >= self.most_ends || self.landings == MOST_LANDINGS {
            self.begin_stretch(nodes, ends + 1);
        }
    }

    /// A node of `degree` is present from now on.
    pub fn join(&mut self, degree: u32) {
        let cell = self.cells.of(degree);
        let (degree, position) = (i128::from(degree), i128::from(self.landings));
        if let Some(content) = self.contents.get_mut(cell) {
            content.joined += 1;
            content.joined_ends += degree;
            content.joined_positions += position;
            content.joined_end_positions += degree * position;
        }
    }

    /// Newcomers have joined; now `nodes` with `ends` in all are present.
    #[inline]
    pub fn grown(&mut self, nodes: u64, ends: u64) {
        if nodes >= self.most_nodes || ends >= self.most_ends {
            self.begin_stretch(nodes, ends);
        }
    }

    /// The statistics; none when nothing landed.
    pub fn finish(mut self) -> Result<Option<LinkEvents>, CensusError> {
        self.close_stretch();
        let ratios = self.ratios.finish();
        if ratios.is_empty() {
            return Ok(None);
        }
        let events = LinkEvents::new(ratios, self.windows);
        events.map(Some).map_err(|faults| CensusError::Inconsistent(faults.iter().map(ToString::to_string).collect()))
    }

    fn begin_stretch(&mut self, nodes: u64, ends: u64) {
        self.close_stretch();
        let grown = |size: u64| ((size as f64 * (1.0 + GROWTH)).ceil() as u64).max(size + 1);
        (self.most_nodes, self.most_ends) = (grown(nodes), grown(ends));
    }

    /// Sums up the current stretch, and carries the contents of the cells over to the next.
    fn close_stretch(&mut self) {
        let landings = i128::from(self.landings);
        let mut cells = Vec::new();
        let mut below = Moves::default();
        for (cell, (landed, content)) in self.landed.iter_mut().zip(&mut self.contents).enumerate() {
            let Landed { all, out } = std::mem::take(landed);
            let (lowest, highest) = (self.cells.lowest(cell), self.cells.highest(cell));
            let count = |moves: Moves| i128::from(moves.count);
            let positions = |moves: Moves| i128::from(moves.positions);
            let entering_ends = i128::from(lowest);
            let leaving_ends = i128::from(highest);
            let nodes = content.nodes + content.joined + count(below) - count(out);
            let node_positions = content.joined_positions + positions(below) - positions(out);
            // Landings that stay inside add one end; those that leave take all the node's ends with them.
            let ends = content.ends + content.joined_ends + entering_ends * count(below) + count(all)
                - (leaving_ends + 1) * count(out);
            let end_positions = content.joined_end_positions + entering_ends * positions(below) + positions(all)
                - (leaving_ends + 1) * positions(out);
            let node_exposure = nodes * landings - node_positions;
            if node_exposure > 0 {
                cells.push(AttachmentCell {
                    lowest: lowest.into(),
                    highest: highest.into(),
                    landings: all.count,
                    node_exposure: node_exposure as f64,
                    end_exposure: (ends * landings - end_positions) as f64,
                });
            }
            *content = Content { nodes, ends, ..Content::default() };
            below = out;
        }
        if self.landings > 0 {
            self.windows.push(AttachmentWindow { cells });
        }
        self.landings = 0;
    }
}

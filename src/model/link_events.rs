//! What a time-ordered link list tells of attachment: each landing end with its target's degree just before, summed up.

use std::fmt;

/// Landings whose target had nearly the same ratio r = k·N/K just before, the degree over the mean degree.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RatioClass {
    /// Mean of r over the landings.
    pub ratio: f64,
    /// Variance of r over the landings; small against ratio².
    pub variance: f64,
    /// Landing ends.
    pub landings: u64,
}

/// Nodes whose degree lies in a short range, over a stretch of landings.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AttachmentCell {
    /// Smallest degree of the cell.
    pub lowest: u64,
    /// Largest degree of the cell.
    pub highest: u64,
    /// Landing ends whose target was in the cell just before.
    pub landings: u64,
    /// Nodes in the cell just before each landing, summed over the landings of the stretch: node·landings.
    pub node_exposure: f64,
    /// Link ends of those nodes, summed the same way: end·landings.
    pub end_exposure: f64,
}

/// A stretch of the list over which the network grew by a few per cent.
#[derive(Debug, Clone, PartialEq)]
pub struct AttachmentWindow {
    /// Cells in ascending degree.
    pub cells: Vec<AttachmentCell>,
}

/// The attachment statistics of a link list.
#[derive(Debug, Clone, PartialEq)]
pub struct LinkEvents {
    ratios: Vec<RatioClass>,
    windows: Vec<AttachmentWindow>,
}

/// What is wrong with attachment statistics, and where.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LinkEventsFault {
    /// `ratios` or `windows`.
    pub field: &'static str,
    /// Index of the offending item; `None` for the whole list.
    pub index: Option<usize>,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for LinkEventsFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

impl LinkEvents {
    /// Statistics of one link list.
    ///
    /// # Errors
    /// Every class or window that no list can have: numbers that are negative or not finite, cells out of order, landings
    /// without exposure, no landing at all.
    pub fn new(ratios: Vec<RatioClass>, windows: Vec<AttachmentWindow>) -> Result<Self, Vec<LinkEventsFault>> {
        let mut faults = Vec::new();
        let mut fault = |field, index, detail: &str| {
            faults.push(LinkEventsFault { field, index, detail: detail.into() });
        };
        let sound = |x: f64| x.is_finite() && x >= 0.0;
        for (index, class) in ratios.iter().enumerate() {
            if !(sound(class.ratio) && sound(class.variance)) {
                fault("ratios", Some(index), "a ratio and its variance are finite and not negative");
            }
        }
        for (index, window) in windows.iter().enumerate() {
            let mut next = 0;
            for cell in &window.cells {
                if cell.lowest < next || cell.highest < cell.lowest {
                    fault("windows", Some(index), "cells must be in ascending degree and must not overlap");
                }
                next = cell.highest.saturating_add(1);
                if !(sound(cell.node_exposure) && sound(cell.end_exposure)) {
                    fault("windows", Some(index), "exposures are finite and not negative");
                }
                if cell.landings > 0 && cell.node_exposure == 0.0 {
                    fault("windows", Some(index), "a cell with landings has nodes to land on");
                }
            }
        }
        match ratios.iter().map(|class| u128::from(class.landings)).sum::<u128>() {
            0 => fault("ratios", None, "no link landed on a node that was there before"),
            sum if sum > u128::from(u64::MAX) => fault("ratios", None, "the landings add up to more than 2^64 - 1"),
            _ => {}
        }
        if faults.is_empty() { Ok(Self { ratios, windows }) } else { Err(faults) }
    }

    /// Landings by the ratio of their target's degree to the mean degree.
    pub fn ratios(&self) -> &[RatioClass] {
        &self.ratios
    }

    /// Landings and exposure by degree, stretch by stretch, oldest first.
    pub fn windows(&self) -> &[AttachmentWindow] {
        &self.windows
    }

    /// Landing ends in all.
    pub fn landings(&self) -> u64 {
        self.ratios.iter().map(|class| class.landings).sum()
    }
}

//! What a planner asks beyond a table of tails: limits, costs by degree, watched nodes, what-ifs.

mod bands;
mod change;
mod limit;
mod watch;

pub use bands::{Band, Bands};
pub use change::{Change, DegreeCap, RefusedLinks, Shift};
pub use limit::Limit;
pub use watch::{Watch, WatchedClass, WatchedNode};

use std::fmt;

/// What is wrong with a question, and where within it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct QuestionFault {
    /// Index of the offending item, where the question is a list.
    pub index: Option<usize>,
    /// The field at fault, as callers write it; empty for the whole.
    pub field: &'static str,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl QuestionFault {
    fn new(index: Option<usize>, field: &'static str, detail: impl Into<String>) -> Self {
        Self { index, field, detail: detail.into() }
    }
}

impl fmt::Display for QuestionFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

/// Everything that may be asked besides the tails.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Questions {
    /// Limits on tail sizes.
    pub limits: Vec<Limit>,
    /// Costs by degree.
    pub bands: Option<Bands>,
    /// Nodes and classes of nodes to follow.
    pub watch: Option<Watch>,
    /// So many of the largest nodes' degrees.
    pub next_hubs: usize,
    /// What-ifs, each beside the forecast as it stands.
    pub scenarios: Vec<Change>,
}

/// Most limits, watched nodes and classes, scenarios, bands or ranks in one request.
pub const MAX_LIMITS: usize = 50;
/// See [`MAX_LIMITS`].
pub const MAX_BANDS: usize = 50;
/// See [`MAX_LIMITS`].
pub const MAX_WATCHED: usize = 500;
/// See [`MAX_LIMITS`].
pub const MAX_SCENARIOS: usize = 10;
/// See [`MAX_LIMITS`].
pub const MAX_NEXT_HUBS: usize = 100;

impl Questions {
    /// Whether nothing is asked.
    pub fn is_empty(&self) -> bool {
        *self == Self::default()
    }
}

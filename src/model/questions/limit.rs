//! A limit on the number of hubs.

use jiff::Timestamp;

use super::QuestionFault;
use crate::model::MAX_DEGREE;

/// At most `max_nodes` nodes with at least `threshold` links until `by`, at a stated risk.
#[derive(Debug, Clone, PartialEq)]
pub struct Limit {
    name: Option<String>,
    threshold: u64,
    max_nodes: u64,
    by: Timestamp,
    risk: f64,
}

impl Limit {
    /// A limit; a risk of 0 is kept, for its answer says what comes nearest.
    ///
    /// # Errors
    /// A threshold that is 0 or above 2^53 − 1, a number of nodes above 2^53 − 1, a risk outside [0, 1).
    pub fn new(
        name: Option<String>,
        threshold: u64,
        max_nodes: u64,
        by: Timestamp,
        risk: f64,
    ) -> Result<Self, Vec<QuestionFault>> {
        let mut faults = Vec::new();
        let mut fault = |field, detail: String| faults.push(QuestionFault::new(None, field, detail));
        if threshold == 0 || threshold > MAX_DEGREE {
            fault("threshold", format!("threshold {threshold} is not between 1 and {MAX_DEGREE}"));
        }
        if max_nodes > MAX_DEGREE {
            fault("max_nodes", format!("max_nodes {max_nodes} is above {MAX_DEGREE}"));
        }
        if !(0.0..1.0).contains(&risk) {
            fault("risk", format!("risk {risk} is not a probability below 1; write 0.05 for 5 %"));
        }
        if faults.is_empty() { Ok(Self { name, threshold, max_nodes, by, risk }) } else { Err(faults) }
    }

    /// The caller's name for it.
    pub fn name(&self) -> Option<&str> {
        self.name.as_deref()
    }

    /// Links from which on a node counts.
    pub fn threshold(&self) -> u64 {
        self.threshold
    }

    /// The most nodes that are provided for.
    pub fn max_nodes(&self) -> u64 {
        self.max_nodes
    }

    /// The date up to which the limit must hold.
    pub fn by(&self) -> Timestamp {
        self.by
    }

    /// Probability of a crossing that the planner puts up with, in [0, 1).
    pub fn risk(&self) -> f64 {
        self.risk
    }
}

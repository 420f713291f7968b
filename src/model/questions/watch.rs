//! Nodes to follow.

use super::{MAX_WATCHED, QuestionFault};
use crate::model::{MAX_DEGREE, Thresholds};

/// A node by name, with its degree at the newest snapshot.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct WatchedNode {
    /// The caller's name for it.
    pub name: String,
    /// Its degree today.
    pub degree: u64,
}

/// All of today's nodes with so many links.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct WatchedClass {
    /// Fewest links today, included.
    pub from: u64,
    /// Most links today, included.
    pub to: u64,
}

/// Nodes and classes of nodes to follow, and the thresholds they may pass; none: those of the forecast.
#[derive(Debug, Clone, PartialEq)]
pub struct Watch {
    /// Named nodes.
    pub nodes: Vec<WatchedNode>,
    /// Classes of today's nodes.
    pub classes: Vec<WatchedClass>,
    /// Thresholds of its own.
    pub thresholds: Option<Thresholds>,
}

impl Watch {
    /// Nodes and classes to follow.
    ///
    /// # Errors
    /// Nothing to follow, or too much; a degree above 2^53 − 1; a class that ends before it starts. The field is `nodes` or
    /// `classes`.
    pub fn new(
        nodes: Vec<WatchedNode>,
        classes: Vec<WatchedClass>,
        thresholds: Option<Thresholds>,
    ) -> Result<Self, Vec<QuestionFault>> {
        let asked = nodes.len() + classes.len();
        if asked == 0 || asked > MAX_WATCHED {
            let detail = format!("{asked} nodes and classes; give between 1 and {MAX_WATCHED}");
            return Err(vec![QuestionFault::new(None, "", detail)]);
        }
        let mut faults = Vec::new();
        let too_large = format!("a degree is at most {MAX_DEGREE}");
        for (i, _) in nodes.iter().enumerate().filter(|(_, node)| node.degree > MAX_DEGREE) {
            faults.push(QuestionFault::new(Some(i), "nodes", too_large.clone()));
        }
        for (i, class) in classes.iter().enumerate() {
            if class.from > class.to {
                let detail = format!("the class ends at {}, before it starts at {}", class.to, class.from);
                faults.push(QuestionFault::new(Some(i), "classes", detail));
            } else if class.to > MAX_DEGREE {
                faults.push(QuestionFault::new(Some(i), "classes", too_large.clone()));
            }
        }
        if faults.is_empty() { Ok(Self { nodes, classes, thresholds }) } else { Err(faults) }
    }
}

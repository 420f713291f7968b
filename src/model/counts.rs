//! Degree counts: how many nodes have each degree.

use std::fmt;

/// The largest degree a node may have: 2^53 − 1, the largest whole number a JSON reader keeps exactly.
pub const MAX_DEGREE: u64 = (1 << 53) - 1;

/// What a node's degree counts.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum DegreeKind {
    /// Links received (in-degree). A newcomer usually arrives with none.
    Received,
    /// All links of an undirected network. A newcomer arrives with its own.
    Total,
}

/// A degree histogram: distinct degrees in ascending order, each with a positive number of nodes.
///
/// The node sum fits `u64` and the link-end sum fits `u128` by construction.
///
/// ```
/// use tailcast::model::DegreeCounts;
/// let counts = DegreeCounts::from_pairs(&[(2, 10), (0, 50), (7, 1), (3, 0)]).unwrap();
/// assert_eq!(counts.nodes(), 61);
/// assert_eq!(counts.link_ends(), 27);
/// assert_eq!(counts.tail_size(2), 11);
/// assert_eq!(counts.largest(), 7);
/// ```
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct DegreeCounts {
    degrees: Vec<u64>,
    nodes: Vec<u64>,
    /// `tails[i]`: nodes with degree at least `degrees[i]`.
    tails: Vec<u64>,
    link_ends: u128,
}

/// One thing wrong with a list of degree counts, and the index of the pair that has it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CountsFault {
    /// Index of the offending pair in the list as given; `None` for a fault of the whole list.
    pub index: Option<usize>,
    /// What is wrong.
    pub kind: CountsFaultKind,
}

/// The ways a list of degree counts can be wrong.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum CountsFaultKind {
    /// No pair has a node.
    Empty,
    /// The degree stands in an earlier pair too.
    Repeated {
        /// The degree.
        degree: u64,
        /// Index of the first pair with it.
        first: usize,
    },
    /// The degree is above [`MAX_DEGREE`].
    DegreeTooLarge {
        /// The degree.
        degree: u64,
    },
    /// The nodes add up to more than `u64` holds.
    TooManyNodes,
}

impl fmt::Display for CountsFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match &self.kind {
            CountsFaultKind::Empty => {
                write!(f, "no degree has a node; give at least one [degree, nodes] pair with nodes above 0")
            }
            CountsFaultKind::Repeated { degree, first } => {
                write!(f, "degree {degree} is given twice (first in pair {first}); add the two counts into one pair")
            }
            CountsFaultKind::DegreeTooLarge { degree } => {
                write!(f, "degree {degree} is above the largest allowed, {MAX_DEGREE} (2^53 - 1)")
            }
            CountsFaultKind::TooManyNodes => {
                write!(f, "the nodes add up to more than {} (2^64 - 1)", u64::MAX)
            }
        }
    }
}

impl DegreeCounts {
    /// Builds the histogram from `(degree, nodes)` pairs in any order; pairs with zero nodes are dropped.
    ///
    /// # Errors
    /// Every fault of the list, not only the first.
    pub fn from_pairs(pairs: &[(u64, u64)]) -> Result<Self, Vec<CountsFault>> {
        let mut faults = Vec::new();
        let mut order: Vec<usize> = (0..pairs.len()).collect();
        order.sort_by_key(|&i| (pairs[i].0, i));
        for pair in order.windows(2) {
            let (first, index) = (pair[0], pair[1]);
            if pairs[first].0 == pairs[index].0 {
                let kind = CountsFaultKind::Repeated { degree: pairs[index].0, first };
                faults.push(CountsFault { index: Some(index), kind });
            }
        }
        for (index, &(degree, _)) in pairs.iter().enumerate() {
            if degree > MAX_DEGREE {
                faults.push(CountsFault { index: Some(index), kind: CountsFaultKind::DegreeTooLarge { degree } });
            }
        }
        let total: u128 = pairs.iter().map(|&(_, n)| u128::from(n)).sum();
        if total == 0 {
            faults.push(CountsFault { index: None, kind: CountsFaultKind::Empty });
        }
        if total > u128::from(u64::MAX) {
            faults.push(CountsFault { index: None, kind: CountsFaultKind::TooManyNodes });
        }
        if !faults.is_empty() {
            faults.sort_by_key(|fault| fault.index);
            return Err(faults);
        }
        let (degrees, nodes): (Vec<u64>, Vec<u64>) = order.iter().map(|&i| pairs[i]).filter(|&(_, n)| n > 0).unzip();
        let mut tails = nodes.clone();
        for i in (0..tails.len().saturating_sub(1)).rev() {
            tails[i] += tails[i + 1]; // within u64: the total was checked
        }
        let link_ends = degrees.iter().zip(&nodes).map(|(&k, &n)| u128::from(k) * u128::from(n)).sum();
        Ok(Self { degrees, nodes, tails, link_ends })
    }

    /// Distinct degrees, ascending.
    pub fn degrees(&self) -> &[u64] {
        &self.degrees
    }

    /// Number of nodes of each distinct degree, in the order of [`Self::degrees`].
    pub fn nodes_by_degree(&self) -> &[u64] {
        &self.nodes
    }

    /// `(degree, nodes)` pairs in ascending degree.
    pub fn iter(&self) -> impl DoubleEndedIterator<Item = (u64, u64)> + ExactSizeIterator + '_ {
        self.degrees.iter().copied().zip(self.nodes.iter().copied())
    }

    /// Total number of nodes, N = Σ n_k.
    pub fn nodes(&self) -> u64 {
        self.tails.first().copied().unwrap_or(0)
    }

    /// Total number of link ends, K = Σ k·n_k.
    pub fn link_ends(&self) -> u128 {
        self.link_ends
    }

    /// Mean degree K/N.
    pub fn mean_degree(&self) -> f64 {
        self.link_ends as f64 / self.nodes() as f64
    }

    /// Smallest degree that has a node.
    pub fn smallest(&self) -> u64 {
        self.degrees.first().copied().unwrap_or(0)
    }

    /// Largest degree that has a node.
    pub fn largest(&self) -> u64 {
        self.degrees.last().copied().unwrap_or(0)
    }

    /// The degree of the node of a rank, 1 the largest; none where there are fewer nodes.
    pub fn degree_of_rank(&self, rank: u64) -> Option<u64> {
        let place = self.tails.partition_point(|&tail| tail >= rank);
        place.checked_sub(1).and_then(|i| self.degrees.get(i)).copied()
    }

    /// Tail size S_j: the number of nodes with degree at least `threshold`.
    pub fn tail_size(&self, threshold: u64) -> u64 {
        let first = self.degrees.partition_point(|&k| k < threshold);
        self.tails.get(first).copied().unwrap_or(0)
    }
}

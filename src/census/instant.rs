//! The pairs linked at the current instant, to tell repeats.

use std::collections::HashSet;

use foldhash::fast::RandomState;

/// Pairs that are looked through one by one; most instants of a list with a fine clock have fewer.
const FEW: usize = 16;
/// Pairs remembered beyond one a node.
const ALLOWANCE: usize = 1 << 16;

/// Pairs of one instant. Two numbers of 32 bits make one of 64, so a repeat is certain.
#[derive(Debug, Default)]
pub struct Pairs {
    few: Vec<u64>,
    many: HashSet<u64, RandomState>,
    overflowed: bool,
}

impl Pairs {
    /// Whether the pair is new at this instant; remembers it. `nodes` bounds how many are.
    #[inline]
    pub fn is_new(&mut self, source: u32, target: u32, nodes: usize) -> bool {
        let pair = u64::from(source) << 32 | u64::from(target);
        if self.few.contains(&pair) {
            return false;
        }
        if self.few.len() < FEW {
            self.few.push(pair);
            return true;
        }
        if self.many.len() < nodes + ALLOWANCE {
            return self.many.insert(pair);
        }
        self.overflowed = true;
        !self.many.contains(&pair)
    }

    /// Forgets the pairs: a new instant.
    #[inline]
    pub fn clear(&mut self) {
        self.few.clear();
        if !self.many.is_empty() {
            // Emptying a table takes as long as it is large; one instant with many links must not slow all later ones.
            let length = self.many.len();
            self.many.clear();
            self.many.shrink_to(2 * length);
        }
    }

    /// Whether there were more pairs at some instant than are remembered.
    pub fn overflowed(&self) -> bool {
        self.overflowed
    }
}

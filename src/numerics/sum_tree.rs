//! Weighted picking among many items whose weights change.

/// A binary tree of partial sums: setting a weight and picking in proportion to weight take O(log n).
///
/// # Numerical notes
/// Sums are recomputed from their two halves, so rounding errors do not build up however often weights change.
///
/// ```
/// use tailcast::numerics::sum_tree::SumTree;
/// let mut tree = SumTree::default();
/// for (item, weight) in [(0, 1.0), (1, 0.0), (2, 3.0)] {
///     tree.set(item, weight);
/// }
/// assert_eq!((tree.total(), tree.pick(0.24), tree.pick(0.26)), (4.0, Some(0), Some(2)));
/// ```
#[derive(Debug, Clone, Default)]
pub struct SumTree {
    /// Node i has children 2i and 2i + 1; the leaves are the second half.
    sums: Vec<f64>,
}

impl SumTree {
    /// Gives `item` the weight `weight` ≥ 0; the tree grows as needed, new items weighing nothing.
    pub fn set(&mut self, item: usize, weight: f64) {
        if item >= self.leaves() {
            self.grow((item + 1).next_power_of_two());
        }
        let mut at = self.leaves() + item;
        if self.sums[at] == weight {
            return;
        }
        self.sums[at] = weight;
        while at > 1 {
            at /= 2;
            self.sums[at] = self.sums[2 * at] + self.sums[2 * at + 1];
        }
    }

    /// Sum of all weights.
    pub fn total(&self) -> f64 {
        self.sums.get(1).copied().unwrap_or(0.0)
    }

    /// The item at `point` in [0, 1) of the weights laid end to end; none when all weigh nothing.
    pub fn pick(&self, point: f64) -> Option<usize> {
        let mut left = point * self.total();
        if self.total() <= 0.0 {
            return None;
        }
        let mut at = 1;
        while at < self.leaves() {
            at *= 2;
            // Rounding may leave a remainder just past the last item with weight: stay where there is some.
            if left >= self.sums[at] && self.sums[at + 1] > 0.0 {
                left -= self.sums[at];
                at += 1;
            }
        }
        Some(at - self.leaves())
    }

    fn leaves(&self) -> usize {
        self.sums.len() / 2
    }

    fn grow(&mut self, leaves: usize) {
        let mut sums = vec![0.0; 2 * leaves];
        sums[leaves..leaves + self.leaves()].copy_from_slice(&self.sums[self.leaves()..]);
        for at in (1..leaves).rev() {
            sums[at] = sums[2 * at] + sums[2 * at + 1];
        }
        self.sums = sums;
    }
}

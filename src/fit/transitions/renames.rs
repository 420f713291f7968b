//! Nodes that depart as another arrives with as many links: most likely the same node under a new name.

use crate::model::Transitions;

/// Only newcomers with so many times the mean degree are looked at, and no fewer links than …
const TIMES_MEAN: f64 = 10.0;
/// … this: below, many nodes come and go with as many links by chance.
const FEWEST_LINKS: u64 = 20;
/// The two degrees differ by at most this factor.
const NEAREST: f64 = 2.0;

/// Pairs (degree before, degree after) of departed nodes and newcomers that take each other's place, largest first; each node
/// is in one pair at most, the nearest degrees go together.
pub(super) fn renamed(table: &Transitions, mean_degree: f64) -> Vec<(u64, u64)> {
    let least = ((TIMES_MEAN * mean_degree) as u64).max(FEWEST_LINKS);
    let each = |(degree, nodes): (u64, u64)| std::iter::repeat_n(degree, nodes.min(1 << 16) as usize);
    let newcomers: Vec<u64> = table.newcomers().filter(|&(k, _)| k >= least).flat_map(each).collect();
    let floor = (least as f64 / NEAREST) as u64;
    let mut departed: Vec<u64> = table.departures().filter(|&(k, _)| k >= floor).flat_map(each).collect();
    departed.sort_unstable();
    let mut pairs = Vec::new();
    // From the largest down, where chance pairs are rarest.
    for after in newcomers.into_iter().rev() {
        let distance = |before: u64| (before as f64 / after as f64).ln().abs();
        let place = departed.partition_point(|&before| before < after);
        let nearest = [place.checked_sub(1), Some(place).filter(|&i| i < departed.len())];
        let nearest =
            nearest.into_iter().flatten().min_by(|&a, &b| distance(departed[a]).total_cmp(&distance(departed[b])));
        if let Some(index) = nearest.filter(|&i| distance(departed[i]) <= NEAREST.ln()) {
            pairs.push((departed.remove(index), after));
        }
    }
    pairs
}

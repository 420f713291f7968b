//! What an answer keeps of its evidence, so that it can be drawn without it.

use super::{TailPoint, TailPointAnswer};
use crate::evaluate::OriginRequest;
use crate::service::answers::{HistoryAnswer, TailCountAnswer};
use crate::service::numbers::date_text;

/// Snapshots kept: more would not show on a chart, and an answer must not grow with a network's age.
const MOST_SNAPSHOTS: usize = 120;
/// Degrees of the observed and fitted tail kept.
const MOST_DEGREES: usize = 40;

/// What the snapshots counted at the thresholds of tails and limits, oldest first.
pub(super) fn history(request: &OriginRequest) -> Vec<HistoryAnswer> {
    let mut thresholds = request.plan.thresholds().to_vec();
    thresholds.extend(request.questions.limits.iter().map(|limit| limit.threshold()));
    thresholds.sort_unstable();
    thresholds.dedup();
    let kept = spread(request.evidence.snapshots(), MOST_SNAPSHOTS).into_iter();
    kept.map(|snapshot| HistoryAnswer {
        as_of: date_text(snapshot.as_of),
        nodes: snapshot.counts.nodes(),
        tail: (thresholds.iter())
            .map(|&threshold| TailCountAnswer { threshold, nodes: snapshot.counts.tail_size(threshold) })
            .collect(),
    })
    .collect()
}

/// The observed and fitted tail, thinned.
pub(super) fn curve(tail: &[TailPoint]) -> Vec<TailPointAnswer> {
    spread(tail, MOST_DEGREES).into_iter().map(TailPointAnswer::from).collect()
}

/// At most `most` of `all`, evenly spread, first and last among them.
fn spread<T>(all: &[T], most: usize) -> Vec<&T> {
    let last = all.len().saturating_sub(1);
    if all.len() <= most {
        return all.iter().collect();
    }
    (0..most).filter_map(|i| all.get(i * last / (most - 1))).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn first_and_last_are_among_the_evenly_spread() {
        let all: Vec<usize> = (0..1000).collect();
        let kept: Vec<usize> = spread(&all, 5).into_iter().copied().collect();
        assert_eq!(kept, [0, 249, 499, 749, 999]);
        assert_eq!(spread(&all, 2000).len(), 1000);
        assert!(spread::<u8>(&[], 5).is_empty());
    }
}

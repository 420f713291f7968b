//! What must hold of a link list, whatever its bytes.

use std::io::Read;
use std::ops::ControlFlow;

use tailcast::ingest::{FaultPolicy, LinkListPlan, count_links};
use tailcast::model::DegreeKind;

/// Links come by the million from few compressed bytes; past so many blocks the rest would say nothing new.
const MOST_BLOCKS: usize = 64;

/// Counts a list in every way; what comes out must fit together.
pub fn check(list: impl Read + Clone) {
    for kind in [DegreeKind::Received, DegreeKind::Total] {
        for every in [None, "PT1H".parse().ok()] {
            let plan = LinkListPlan { kind, every, faults: FaultPolicy::Skip, link_events: true };
            let mut blocks = 0;
            let counted = count_links(list.clone(), &plan, &mut |_| {
                blocks += 1;
                if blocks < MOST_BLOCKS { ControlFlow::Continue(()) } else { ControlFlow::Break(()) }
            });
            let Ok((tally, report)) = counted else { continue };
            assert_eq!(report.lines, report.links + report.faults());
            let ends = if kind == DegreeKind::Total { 2 * report.links } else { report.links };
            let last = tally.snapshots.last().expect("a snapshot at the end");
            assert_eq!(last.counts.link_ends(), u128::from(ends));
            tally.into_evidence().expect("sound evidence");
        }
    }
}

//! What a refresh of a tracked network costs: fit, record of past forecasts and pooled forecast of 200 thresholds at 12 dates, by the
//! number of snapshots stored. Ratios hold, times do not.
//!
//! usage: cargo bench --bench refresh
#![allow(clippy::unwrap_used, clippy::print_stdout, missing_docs)]

use std::time::Instant;

use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Snapshot, Thresholds,
};

const SNAPSHOTS: usize = 500;
const THRESHOLDS: u64 = 200;
const DATES: i64 = 12;
const DAYS: i64 = 7;

fn main() {
    let snapshots = grown();
    let newest = &snapshots[SNAPSHOTS - 1];
    println!(
        "refresh of a network of {} nodes and {} distinct degrees, {THRESHOLDS} thresholds, {DATES} dates",
        newest.counts.nodes(),
        newest.counts.degrees().len()
    );
    let mut first = None;
    for kept in [3, 14, 100, SNAPSHOTS] {
        let evidence = Evidence::new(DegreeKind::Received, snapshots[SNAPSHOTS - kept..].to_vec(), None).unwrap();
        let dates: Vec<_> = (1..=DATES).map(|i| newest.as_of + jiff::SignedDuration::from_hours(24 * 30 * i)).collect();
        // Log-spaced from 1 to 3,000.
        let thresholds: Vec<u64> = (0..THRESHOLDS).map(|i| 1 + i + (i * i * i) / 2_800).collect();
        let request = OriginRequest {
            questions: Default::default(),
            evidence,
            fit: FitRequest::default(),
            arrivals: None,
            plan: ForecastPlan::new(newest.as_of, Thresholds::new(&thresholds).unwrap(), &dates, Levels::default())
                .unwrap(),
        };
        let start = Instant::now();
        let found = answer(&request, &|| false).unwrap();
        let seconds = start.elapsed().as_secs_f64();
        let first = *first.get_or_insert(seconds);
        println!(
            "  {kept:>3} snapshots  {seconds:>6.2} s   ratio to 3 snapshots {:.2}   past dates scored {}",
            seconds / first,
            found.pools[0].pool.scored
        );
    }
}

/// Weekly snapshots of a simulated network.
fn grown() -> Vec<Snapshot> {
    let forces = GrowthParameters::new(
        DegreeKind::Received,
        AttachmentMix::new(0.85).unwrap(),
        ArrivalPlan::constant(30.0).unwrap(),
        EntryDegrees::single(0),
        4.0,
    );
    let start = DegreeCounts::from_pairs(&[(0, 50), (1, 30), (5, 5)]).unwrap();
    let mut network = Simulation::new(&start, forces.unwrap(), 1).unwrap();
    let day: jiff::Timestamp = "2017-01-01T00:00:00Z".parse().unwrap();
    let weeks = (1..=SNAPSHOTS as i64).map(|week| {
        network.run_until((week * DAYS) as f64).unwrap();
        let as_of = day + jiff::SignedDuration::from_hours(24 * DAYS * week);
        Snapshot { as_of, counts: network.degree_counts().unwrap() }
    });
    weeks.collect()
}

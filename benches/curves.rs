//! How the cost of a forecast grows with each part of its size, as a table: seconds, and the exponent from one size to the next.
//!
//! usage: cargo bench --bench curves
//!
//! Distinct degrees, nodes, thresholds and dates: one snapshot whose links per arrival are as they always were (closed forms), and the
//! same with half as many links per arrival from now on (u/v drifts: contours). Snapshots: the pooled forecast, fit and record of past
//! forecasts included. `benches/curves.py` draws the table.
#![allow(clippy::unwrap_used, clippy::print_stdout, missing_docs)]

use std::time::{Duration, Instant};

use jiff::{SignedDuration, Timestamp};
use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Snapshot, Thresholds,
};

const SNAPSHOTS: usize = 500;
const DISTINCT: u64 = 1_500;
const THRESHOLDS: u64 = 5;
const DATES: u64 = 12;
/// Each point is the least of as many runs as fit into this, at most five.
const PATIENCE: Duration = Duration::from_secs(3);

fn main() {
    println!("part\tlaw\tsize\tseconds\texponent");
    for drifting in [false, true] {
        let most = if drifting { 100_000 } else { 1_000_000 };
        let law = if drifting { "drifting" } else { "steady" };
        let one = |distinct, times, thresholds, dates| request(counts(distinct, times), thresholds, dates, drifting);
        curve("distinct degrees", law, powers(100, most), |size| one(size, 1, THRESHOLDS, DATES));
        curve("nodes", law, powers(1, 1_000_000), |size| one(DISTINCT, size, THRESHOLDS, DATES));
        curve("thresholds", law, vec![1, 5, 20, 50, 100, 200], |size| one(DISTINCT, 1, size, DATES));
        curve("dates", law, vec![1, 12, 52, 120, 365], |size| one(DISTINCT, 1, THRESHOLDS, size));
    }
    let snapshots = grown();
    curve("snapshots", "pooled", vec![1, 2, 5, 14, 50, 150, 500], |size| followed(&snapshots, size as usize));
}

fn powers(from: u64, to: u64) -> Vec<u64> {
    std::iter::successors(Some(from), |size| size.checked_mul(10)).take_while(|&size| size <= to).collect()
}

fn curve(part: &str, law: &str, sizes: Vec<u64>, request: impl Fn(u64) -> OriginRequest) {
    let mut before: Option<(u64, f64)> = None;
    for size in sizes {
        let request = request(size);
        let start = Instant::now();
        let mut least = f64::INFINITY;
        for _ in 0..5 {
            let clock = Instant::now();
            std::hint::black_box(answer(&request, &|| false).unwrap());
            least = least.min(clock.elapsed().as_secs_f64());
            if start.elapsed() > PATIENCE {
                break;
            }
        }
        let exponent = before.map(|(sooner, less)| (least / less).ln() / (size as f64 / sooner as f64).ln());
        let exponent = exponent.map_or("".into(), |exponent| format!("{exponent:.2}"));
        println!("{part}\t{law}\t{size}\t{least:.6}\t{exponent}");
        before = Some((size, least));
    }
}

/// Counts that fall as k^−2.25 over the degrees from 0 on, one node at least, taken `times` times.
fn counts(distinct: u64, times: u64) -> DegreeCounts {
    let nodes = |degree: u64| (1e6 / (degree as f64 + 1.0).powf(2.25)).round().max(1.0) as u64;
    let pairs: Vec<(u64, u64)> = (0..distinct).map(|degree| (degree, times * nodes(degree))).collect();
    DegreeCounts::from_pairs(&pairs).unwrap()
}

fn request(counts: DegreeCounts, thresholds: u64, dates: u64, drifting: bool) -> OriginRequest {
    let as_of: Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    let dates: Vec<Timestamp> =
        (1..=dates).map(|i| as_of + SignedDuration::from_hours((24 * 365 * i / dates) as i64)).collect();
    // Log-spaced from 10 to twice the largest degree.
    let reach = (2.0 * counts.largest() as f64 / 10.0).ln();
    let step = |i: u64| (10.0 * (reach * i as f64 / thresholds as f64).exp()) as u64 + i;
    let links = counts.mean_degree() * if drifting { 0.5 } else { 1.0 };
    let arrivals = ArrivalPlan::constant(counts.nodes() as f64 / 1_000.0).unwrap();
    let thresholds = Thresholds::new(&(0..thresholds).map(step).collect::<Vec<_>>()).unwrap();
    OriginRequest {
        evidence: Evidence::new(DegreeKind::Received, vec![Snapshot { as_of, counts }], None).unwrap(),
        fit: FitRequest { links_per_arrival: Some(links), ..FitRequest::default() },
        arrivals: Some(arrivals),
        plan: ForecastPlan::new(as_of, thresholds, &dates, Levels::default()).unwrap(),
        questions: Default::default(),
    }
}

/// A forecast from the newest of a network's snapshots.
fn followed(snapshots: &[Snapshot], kept: usize) -> OriginRequest {
    let newest = &snapshots[SNAPSHOTS - 1];
    let counts = newest.counts.clone();
    let arrivals = ArrivalPlan::constant(30.0).unwrap();
    let alone = request(counts, THRESHOLDS, DATES, false);
    let dates: Vec<Timestamp> =
        (1..=DATES).map(|i| newest.as_of + SignedDuration::from_hours(24 * 30 * i as i64)).collect();
    let evidence = Evidence::new(DegreeKind::Received, snapshots[SNAPSHOTS - kept..].to_vec(), None).unwrap();
    OriginRequest {
        evidence,
        fit: FitRequest::default(),
        arrivals: Some(arrivals),
        plan: ForecastPlan::new(
            newest.as_of,
            Thresholds::new(alone.plan.thresholds()).unwrap(),
            &dates,
            Levels::default(),
        )
        .unwrap(),
        questions: Default::default(),
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
    let day: Timestamp = "2017-01-01T00:00:00Z".parse().unwrap();
    let weeks = (1..=SNAPSHOTS as i64).map(|week| {
        network.run_until((week * 7) as f64).unwrap();
        let as_of = day + SignedDuration::from_hours(24 * 7 * week);
        Snapshot { as_of, counts: network.degree_counts().unwrap() }
    });
    weeks.collect()
}

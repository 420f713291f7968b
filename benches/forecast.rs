//! What a forecast costs: on 10⁵ and on 10⁹ nodes over the same distinct degrees, and beside one event-by-event simulation.
//!
//! usage: cargo bench --bench forecast
//!
//! Runs are interleaved and compared by their medians, so the ratios hold on a noisy machine; the times themselves do not.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

use std::hint::black_box;
use std::time::{Duration, Instant};

use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::{FitRequest, StationaryLaw};
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Snapshot, Thresholds,
};

const ROUNDS: usize = 9;
const DISTINCT: usize = 1_500;
const SHARE: f64 = 0.8;
const LINKS: f64 = 3.0;

/// A network of about `nodes` nodes with 1,500 distinct degrees, as growth at p = 0.8 leaves it.
fn network(nodes: u64) -> DegreeCounts {
    let mix = AttachmentMix::new(SHARE).expect("a share");
    let law = StationaryLaw::new(mix, LINKS, EntryDegrees::single(0));
    let degrees: Vec<u64> = (0..1_000).chain((1..).map(|i| 1_000 + 40 * i)).take(DISTINCT).collect();
    // The base has 10⁵ nodes and at least one of each degree; larger networks are whole multiples of it.
    const BASE: f64 = 1e5;
    let base =
        degrees.iter().zip(law.log_pmf(&degrees)).map(|(&k, log)| (k, (BASE * log.exp()).round().max(1.0) as u64));
    let pairs: Vec<(u64, u64)> = base.map(|(k, n)| (k, n * (nodes / BASE as u64))).collect();
    DegreeCounts::from_pairs(&pairs).expect("sound counts")
}

/// One forecast, fit included: 12 months, 5 thresholds, two interval levels.
fn request(nodes: u64) -> OriginRequest {
    let counts = network(nodes);
    let arrivals = ArrivalPlan::constant(counts.nodes() as f64 / 1_000.0).expect("a rate");
    let as_of: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().expect("a date");
    let dates: Vec<jiff::Timestamp> =
        (1..=12).map(|month| as_of + jiff::SignedDuration::from_hours(24 * 30 * month)).collect();
    let evidence = Evidence::new(DegreeKind::Received, vec![Snapshot { as_of, counts }], None).expect("one snapshot");
    let thresholds = Thresholds::new(&[10, 100, 1_000, 5_000, 10_000]).expect("thresholds");
    let plan = ForecastPlan::new(as_of, thresholds, &dates, Levels::default()).expect("a plan");
    OriginRequest {
        evidence,
        fit: FitRequest::default(),
        arrivals: Some(arrivals),
        plan,
        questions: Default::default(),
    }
}

/// Grows 10⁶ nodes with three links each, event by event; returns the links landed.
fn simulate() -> u64 {
    let forces = GrowthParameters::new(
        DegreeKind::Received,
        AttachmentMix::new(SHARE).expect("a share"),
        ArrivalPlan::constant(1.0).expect("a rate"),
        EntryDegrees::single(0),
        LINKS,
    )
    .expect("sound forces");
    let start = DegreeCounts::from_pairs(&[(0, 1)]).expect("one node");
    let mut network = Simulation::new(&start, forces, 1).expect("a small network");
    network.arrive_many(1_000_000).expect("room");
    network.degree_counts().unwrap().link_ends() as u64
}

fn timed<T>(work: impl FnOnce() -> T) -> (Duration, T) {
    let clock = Instant::now();
    let result = work();
    (clock.elapsed(), result)
}

fn median(mut times: Vec<Duration>) -> f64 {
    times.sort();
    times[times.len() / 2].as_secs_f64()
}

fn main() {
    let (small, large) = (request(100_000), request(1_000_000_000));
    let run = |request: &OriginRequest| timed(|| black_box(answer(request, &|| false).expect("an answer"))).0;
    let (mut smalls, mut larges, mut simulations, mut links) = (Vec::new(), Vec::new(), Vec::new(), 0);
    for _ in 0..ROUNDS {
        smalls.push(run(&small));
        larges.push(run(&large));
        let (time, landed) = timed(simulate);
        simulations.push(time);
        links = landed;
    }
    let (small, large, simulation) = (median(smalls), median(larges), median(simulations));
    println!(
        "forecast, {DISTINCT} distinct degrees, 12 dates, 5 thresholds, fit and intervals included; medians of {ROUNDS}"
    );
    println!("  10^5 nodes             {:>10.1} ms", 1e3 * small);
    println!("  10^9 nodes             {:>10.1} ms   ratio to 10^5 nodes {:.2}", 1e3 * large, large / small);
    println!(
        "simulation of 10^6 nodes {:>10.1} ms   ratio to the forecast {:.2}",
        1e3 * simulation,
        simulation / small
    );
    println!("  links simulated        {:>10.2} million a second", links as f64 / simulation / 1e6);
}

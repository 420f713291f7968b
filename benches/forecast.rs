//! What a forecast costs: on 4.5·10⁶ and on 4.5·10⁹ nodes over the same distinct degrees, and beside one event-by-event simulation.
//!
//! usage: cargo bench --bench forecast [-- turns]
//!
//! With `turns` it does what it is told on standard input, one word a line, and answers each with a line of JSON (`seconds` and what
//! came out): `network`, `forecast`, `fit`, `simulate`, `touch`. So `benches/peers.py` lets it take turns with others.
//!
//! Runs are interleaved and compared by their medians, so the ratios hold on a noisy machine; the times themselves do not.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

use std::hint::black_box;
use std::io::BufRead;
use std::time::{Duration, Instant};

use serde_json::{Value, json};
use tailcast::evaluate::{OriginAnswer, OriginRequest, answer, fit_origin};
use tailcast::fit::{Fit, FitRequest};
use tailcast::forecast::{CountForecast, DateForecast};
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Interval, Levels, Snapshot, Thresholds,
};

const ROUNDS: usize = 9;
const SHARE: f64 = 0.8;
const LINKS: f64 = 3.0;
/// Nodes of the network that is forecast, whose degrees are about 1,500 distinct ones, and of the one that is only simulated.
const FORECAST_NODES: u64 = 4_500_000;
const SIMULATED_NODES: u64 = 1_000_000;

/// A grown network with about 1,500 distinct degrees, every count taken `times` times.
fn network(times: u64) -> DegreeCounts {
    let grown = grow(FORECAST_NODES).degree_counts().expect("nodes");
    let pairs: Vec<(u64, u64)> = grown.iter().map(|(degree, nodes)| (degree, times * nodes)).collect();
    DegreeCounts::from_pairs(&pairs).expect("sound counts")
}

/// One forecast, fit included: 12 months, 5 thresholds, two interval levels.
fn request(times: u64) -> OriginRequest {
    let counts = network(times);
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
    grow(SIMULATED_NODES).degree_counts().expect("nodes").link_ends() as u64
}

/// A network of `nodes` nodes and one, three links each.
fn grow(nodes: u64) -> Simulation {
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
    network.arrive_many(nodes).expect("room");
    network
}

/// As many random reads and writes as [`simulate`] makes, and nothing else: for each link, one read of an earlier end and one write to
/// a node. Returns the links.
fn touch() -> u64 {
    const LINKS: u64 = 3 * SIMULATED_NODES;
    let (mut ends, mut degrees) = (Vec::<u32>::new(), Vec::<u64>::new());
    let mut state = 1_u64;
    // Knuth's multiplicative generator: next to no time of its own.
    let mut below = |most: u64| {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        ((u128::from(state) * u128::from(most)) >> 64) as u64
    };
    for link in 0..LINKS {
        if link % 3 == 0 {
            degrees.push(0);
        }
        let drawn = below(degrees.len() as u64);
        let read = if ends.is_empty() { 0 } else { ends[below(link) as usize] };
        degrees[drawn as usize] += u64::from(read & 1) + 1;
        ends.push(drawn as u32);
    }
    black_box(&degrees);
    ends.len() as u64
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

/// Does what standard input asks for, a line each.
fn take_turns() {
    let asked = request(1);
    for line in std::io::stdin().lock().lines() {
        let (time, answer) = match line.expect("a word").as_str() {
            "network" => {
                let counts = network(1);
                (Duration::ZERO, json!({ "pairs": counts.iter().collect::<Vec<_>>() }))
            }
            "forecast" => {
                let (time, answer) = timed(|| black_box(answer(&asked, &|| false).expect("an answer")));
                (time, told(&answer))
            }
            "fit" => {
                let (time, fit) = timed(|| black_box(fit_origin(&asked, &|| false).expect("a fit")));
                (time, fitted(&fit))
            }
            "simulate" => {
                let (time, links) = timed(simulate);
                (time, json!({ "links": links }))
            }
            "touch" => {
                let (time, links) = timed(touch);
                (time, json!({ "links": links }))
            }
            other => panic!("no turn is called {other}"),
        };
        println!("{}", json!({ "seconds": time.as_secs_f64(), "answer": answer }));
    }
}

fn fitted(fit: &Fit) -> Value {
    let share = fit.preferential_share;
    let interval = share.interval.expect("an interval");
    json!({ "share": share.value, "low": interval.low, "high": interval.high, "excursion": fit.share_excursion })
}

fn told(answer: &OriginAnswer) -> Value {
    let intervals = |intervals: &[Interval]| intervals.iter().map(|i| [i.low, i.high]).collect::<Vec<_>>();
    let count = |count: &CountForecast| json!({ "expected": count.expected, "median": count.median, "intervals": intervals(&count.intervals) });
    let date = |date: &DateForecast| {
        json!({
            "tail": date.tail.iter().map(|row| count(&row.size)).collect::<Vec<_>>(),
            "nodes": count(&date.nodes),
            "links": count(&date.links),
            "largest": { "median": date.largest_degree.median, "intervals": intervals(&date.largest_degree.intervals) },
        })
    };
    json!({ "fit": fitted(&answer.fit), "dates": answer.forecast.iter().map(date).collect::<Vec<_>>() })
}

fn main() {
    if std::env::args().any(|word| word == "turns") {
        return take_turns();
    }
    let (small, large) = (request(1), request(1_000));
    let run = |request: &OriginRequest| timed(|| black_box(answer(request, &|| false).expect("an answer"))).0;
    let distinct = small.evidence.latest().counts.degrees().len();
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
        "forecast, {distinct} distinct degrees, 12 dates, 5 thresholds, fit and intervals included; medians of {ROUNDS}"
    );
    println!("  4.5*10^6 nodes         {:>10.1} ms", 1e3 * small);
    println!("  4.5*10^9 nodes         {:>10.1} ms   ratio to 4.5*10^6 nodes {:.2}", 1e3 * large, large / small);
    println!(
        "simulation of 10^6 nodes {:>10.1} ms   ratio to the forecast {:.2}",
        1e3 * simulation,
        simulation / small
    );
    println!("  links simulated        {:>10.2} million a second", links as f64 / simulation / 1e6);
}

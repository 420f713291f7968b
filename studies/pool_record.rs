//! Rolling-origin record of the pooled forecast: on the two real networks of `examples/data`, on simulated networks of mixed
//! kinds, and on simulated ones that no attachment law fits.
//!
//! usage: cargo run --release --example pool_record [-- simulated networks, default 400]
//!
//! From every origin with a period before it, one to three periods ahead, given the arrivals and landed links that came. Errors
//! are |ln(forecast/observed)| and coverages those of the 50 % and 90 % intervals, over thresholds 5 to 200 (to 2,000 on Debian)
//! past which at least 5 nodes came. The output is kept in studies/pool_record.txt. Sources of the data: the README beside each
//! table; kinds of simulated networks: studies/worlds/mod.rs.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

mod worlds;

use std::collections::BTreeMap;
use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};

use tailcast::evaluate::{Case, Growth, Member, OriginRecord, Target, Trend, crps, log_error, record, replay};
use tailcast::fit::{FitRequest, Model};
use tailcast::model::{DegreeKind, Evidence, Snapshot};
use worlds::{HARD, Kind, MIXED};

const THRESHOLDS: [u64; 6] = [5, 10, 20, 50, 100, 200];
const DEBIAN_THRESHOLDS: [u64; 9] = [5, 10, 20, 50, 100, 200, 500, 1_000, 2_000];
/// Periods after the first snapshot of a simulated network: ten snapshots, as the answers network has.
const PERIODS: usize = 9;
const AHEAD: usize = 3;

fn main() {
    let networks: u64 = std::env::args().nth(1).map_or(400, |text| text.parse().expect("a number of networks"));
    println!("pooled forecast and plain trends: mean |ln(forecast/observed)|; the ratio is to the best plain trend");
    println!("inside the 50 and 90 % intervals; CRPS of the pool over that of the best trend (nodes)\n");
    println!(
        "{:<16} {:>5} {:>6} {:>8} {:>8} {:>8} {:>8} {:>8} {:>7} {:>7} {:>7} {:>7}",
        "network", "ahead", "cases", "pool", "mix", "arrival", "link", "ln nodes", "ratio", "in 50%", "in 90%", "CRPS"
    );
    table("answers", &past(&worlds::real("answers"), &THRESHOLDS));
    table("debian", &past(&worlds::real("debian"), &DEBIAN_THRESHOLDS));
    let mixed = simulated(&MIXED, networks);
    println!();
    for kind in MIXED {
        table(&format!("{kind:?}"), &of_kind(&mixed, kind));
    }
    table("all five kinds", &mixed.iter().flat_map(|(_, cases)| cases.clone()).collect::<Vec<_>>());
    println!();
    let hard = simulated(&HARD, networks / 5);
    for kind in HARD {
        table(&format!("{kind:?}"), &of_kind(&hard, kind));
    }
}

fn of_kind(networks: &[(Kind, Vec<Case>)], kind: Kind) -> Vec<Case> {
    networks.iter().filter(|(own, _)| *own == kind).flat_map(|(_, cases)| cases.clone()).collect()
}

/// As many simulated networks, one seed each, kinds in turn.
fn simulated(kinds: &[Kind], networks: u64) -> Vec<(Kind, Vec<Case>)> {
    let (next, found) = (AtomicU64::new(0), Mutex::new(Vec::new()));
    let work = || {
        loop {
            let seed = next.fetch_add(1, Ordering::Relaxed);
            if seed >= networks {
                return;
            }
            let kind = kinds[(seed % kinds.len() as u64) as usize];
            let cases = past(&worlds::history(kind, PERIODS, seed), &THRESHOLDS);
            found.lock().unwrap().push((seed, kind, cases));
        }
    };
    std::thread::scope(|scope| {
        scope.spawn(work);
        scope.spawn(work);
    });
    let mut found = found.into_inner().unwrap();
    found.sort_by_key(|(seed, ..)| *seed);
    found.into_iter().map(|(_, kind, cases)| (kind, cases)).collect()
}

/// Everything that was forecast of a network and came due.
fn past(snapshots: &[Snapshot], thresholds: &[u64]) -> Vec<Case> {
    let evidence = Evidence::new(DegreeKind::Received, snapshots.to_vec(), None).expect("in order");
    let observed = |date, threshold| {
        snapshots.iter().find(|snapshot| snapshot.as_of == date).map(|s| s.counts.tail_size(threshold) as f64)
    };
    let target = |origin: usize, ahead: usize| {
        let then = snapshots.get(origin + ahead)?;
        let totals = (then.counts.nodes() as f64, then.counts.link_ends() as f64);
        Some(Target { date: then.as_of, ahead: ahead as f64, growth: Growth::Known, totals })
    };
    let records: Vec<OriginRecord> = (1..snapshots.len() - 1)
        .map(|origin| {
            let targets: Vec<Target> = (1..=AHEAD).filter_map(|ahead| target(origin, ahead)).collect();
            record(&evidence, origin, thresholds, &targets, &FitRequest::default(), &|| false).expect("a record")
        })
        .collect();
    replay(&records, &observed).cases
}

fn table(name: &str, cases: &[Case]) {
    let mut by_horizon: BTreeMap<u32, Vec<&Case>> = BTreeMap::new();
    for case in cases.iter().filter(|case| case.observed >= 5.0) {
        by_horizon.entry(case.ahead).or_default().push(case);
    }
    for (ahead, cases) in by_horizon {
        let count = cases.len() as f64;
        let mean = |value: &dyn Fn(&Case) -> f64| cases.iter().map(|case| value(case)).sum::<f64>() / count;
        let of = |case: &Case, member| case.members.iter().find(|(m, _)| *m == member).map_or(case.pooled, |m| m.1);
        let error = |member| 100.0 * mean(&|case| log_error(of(case, member), case.observed).abs());
        let pool = 100.0 * mean(&|case| log_error(case.pooled, case.observed).abs());
        let trends = [Trend::PerArrival, Trend::PerLink, Trend::LogNodes].map(|trend| error(Member::Trend(trend)));
        let best = trends.iter().copied().fold(f64::INFINITY, f64::min);
        let inside = |level: f64| {
            100.0
                * mean(&|case| {
                    let interval = case.law.intervals(&[level])[0];
                    f64::from(interval.low <= case.observed && case.observed <= interval.high)
                })
        };
        let trend_crps = [Trend::PerArrival, Trend::PerLink]
            .map(|trend| mean(&|case| (of(case, Member::Trend(trend)) - case.observed).abs()));
        println!(
            "{name:<16} {ahead:>5} {count:>6} {pool:>7.2}% {:>7.2}% {:>7.2}% {:>7.2}% {:>7.2}% {:>7.2} {:>6.1}% {:>6.1}% {:>7.2}",
            error(Member::Mechanism(Model::Mix)),
            trends[0],
            trends[1],
            trends[2],
            pool / best,
            inside(0.5),
            inside(0.9),
            mean(&|case| crps(&case.law, case.observed)) / trend_crps[0].min(trend_crps[1]),
        );
    }
}

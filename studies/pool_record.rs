//! Rolling-origin record of the pooled forecast: on the two real networks of `examples/data`, on simulated networks of mixed
//! kinds, and on simulated ones that no attachment law fits.
//!
//! usage: cargo run --release --example pool_record [-- simulated networks, default 400]
//!
//! From every origin with a period before it, one to three periods ahead, given the arrivals and links that came and by those expected then. Errors
//! are |ln(forecast/observed)| and coverages those of the 50 % and 90 % intervals, over thresholds 5 to 200 (to 2,000 on Debian)
//! past which at least 5 nodes came. The output is kept in studies/pool_record.txt. Sources of the data: the README beside each
//! table; kinds of simulated networks: studies/worlds/mod.rs.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

mod real;
mod worlds;

use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};

use tailcast::evaluate::{Case, Judged, Member, OriginRecord, RecordPlan, Trend, record, replay, score_table};
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
    println!(
        "mean |ln(forecast/observed)| of the pooled forecast, the plain mix and plain trends, given the arrivals and links that"
    );
    println!(
        "came and by those expected at the origin; the ratio is the pool's to the best plain trend's; outcomes inside the 50"
    );
    println!("and 90 % intervals; CRPS of the pool over the best trend's\n");
    println!(
        "{:<15} {:<8} {:>5} {:>6} {:>8} {:>8} {:>8} {:>8} {:>8} {:>8} {:>6} {:>8} {:>7} {:>6}",
        "network",
        "growth",
        "ahead",
        "cases",
        "pool",
        "mix",
        "arrival",
        "link",
        "day",
        "ln nodes",
        "ratio",
        "in 50%",
        "in 90%",
        "CRPS"
    );
    table("answers", &past(&real::snapshots("answers"), &THRESHOLDS));
    table("debian", &past(&real::snapshots("debian"), &DEBIAN_THRESHOLDS));
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
    let plan = RecordPlan { thresholds: thresholds.to_vec(), ahead: AHEAD, expected: true, fit: FitRequest::default() };
    let records: Vec<OriginRecord> =
        (1..snapshots.len() - 1).map(|origin| record(&evidence, origin, &plan, &|| false).expect("a record")).collect();
    replay(&records, &observed).cases
}

fn table(name: &str, cases: &[Case]) {
    for (judged, given) in [(Judged::Mechanism, "given"), (Judged::Whole, "expected")] {
        for row in score_table(cases, judged, &[0.5, 0.9]).iter().filter(|row| row.threshold.is_none()) {
            let scores = &row.scores;
            let error = |member| {
                let found = scores.members.iter().find(|(own, _)| *own == member);
                found.map_or("-".into(), |(_, errors)| format!("{:.2}%", 100.0 * errors.log_error))
            };
            let inside = |i: usize| 100.0 * scores.coverage[i].1.share().unwrap_or(f64::NAN);
            println!(
                "{name:<15} {given:<8} {:>5} {:>6} {:>7.2}% {:>8} {:>8} {:>8} {:>8} {:>8} {:>6.2} {:>7.1}% {:>6.1}% {:>6.2}",
                row.ahead,
                scores.cases,
                100.0 * scores.pooled.log_error,
                error(Member::Mechanism(Model::Mix)),
                error(Member::Trend(Trend::PerArrival)),
                error(Member::Trend(Trend::PerLink)),
                error(Member::Trend(Trend::PerDay)),
                error(Member::Trend(Trend::LogNodes)),
                1.0 - scores.skill.unwrap_or(f64::NAN),
                inside(0),
                inside(1),
                1.0 - scores.crps_skill.unwrap_or(f64::NAN),
            );
        }
    }
}

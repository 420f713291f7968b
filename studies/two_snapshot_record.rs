//! How forecasts by the plain mix, from two successive snapshots, did on the two real networks of `examples/data`, beside plain trends.
//!
//! usage: cargo run --release --example two_snapshot_record
//!
//! From every pair of neighbouring snapshots the tails one, two and three periods later are forecast, given the arrivals and
//! landed links that came. Errors are |ln(forecast/observed)| over thresholds with at least 5 nodes. The trends carry a
//! tail's last step forward in proportion to arrivals or to landed links. The output is kept in
//! studies/two_snapshot_record.txt. Sources of the data: the README beside each table.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

mod real;

use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::{FitRequest, Model, ModelChoice};
use tailcast::model::{ArrivalPlan, DegreeKind, Evidence, ForecastPlan, Levels, Snapshot, Thresholds, days_between};

struct Record {
    error: f64,
    by_arrivals: f64,
    by_links: f64,
    inside: [f64; 2],
    cases: f64,
}

fn main() {
    println!("mean |ln(forecast/observed)|, and share of outcomes inside the 50 % and 90 % intervals\n");
    println!(
        "{:<8} {:>7} {:>6} {:>9} {:>12} {:>10} {:>9} {:>9} {:>15}",
        "network", "periods", "cases", "forecast", "per arrival", "per link", "in 50 %", "in 90 %", "to best trend"
    );
    let networks =
        [("answers", vec![5, 10, 20, 50, 100, 200]), ("debian", vec![5, 10, 20, 50, 100, 200, 500, 1_000, 2_000])];
    for (network, thresholds) in networks {
        let snapshots = real::snapshots(network);
        for ahead in 1..=3 {
            let Some(r) = record(&snapshots, ahead, &thresholds) else { continue };
            let best = r.by_arrivals.min(r.by_links);
            println!(
                "{network:<8} {ahead:>7} {:>6} {:>8.2}% {:>11.2}% {:>9.2}% {:>8.0}% {:>8.0}% {:>15.2}",
                r.cases,
                100.0 * r.error,
                100.0 * r.by_arrivals,
                100.0 * r.by_links,
                100.0 * r.inside[0],
                100.0 * r.inside[1],
                r.error / best
            );
        }
    }
}

fn record(snapshots: &[Snapshot], ahead: usize, thresholds: &[u64]) -> Option<Record> {
    let mut sum = Record { error: 0.0, by_arrivals: 0.0, by_links: 0.0, inside: [0.0; 2], cases: 0.0 };
    for origin in 1..snapshots.len().saturating_sub(ahead) {
        let (before, now, then) = (&snapshots[origin - 1], &snapshots[origin], &snapshots[origin + ahead]);
        let nodes = |s: &Snapshot| s.counts.nodes() as f64;
        let ends = |s: &Snapshot| s.counts.link_ends() as f64;
        let (arrived, landed) = (nodes(then) - nodes(now), ends(then) - ends(now));
        let evidence = Evidence::new(DegreeKind::Received, vec![before.clone(), now.clone()], None).expect("in order");
        let thresholds = Thresholds::new(thresholds).expect("thresholds");
        let request = OriginRequest {
            questions: Default::default(),
            evidence,
            fit: FitRequest {
                choice: ModelChoice::Only(Model::Mix),
                links_per_arrival: Some(landed / arrived),
                ..FitRequest::default()
            },
            arrivals: Some(ArrivalPlan::constant(arrived / days_between(now.as_of, then.as_of)).expect("a rate")),
            plan: ForecastPlan::new(now.as_of, thresholds, &[then.as_of], Levels::default()).expect("a plan"),
        };
        for tail in &answer(&request, &|| false).expect("an answer").forecast[0].tail {
            let size = |s: &Snapshot| s.counts.tail_size(tail.threshold) as f64;
            let observed = size(then);
            if observed < 5.0 {
                continue;
            }
            let miss = |forecast: f64| (forecast.max(1.0) / observed).ln().abs();
            let carried = |factor: f64| size(now) + (size(now) - size(before)) * factor;
            sum.error += miss(tail.size.expected);
            sum.by_arrivals += miss(carried(arrived / (nodes(now) - nodes(before))));
            sum.by_links += miss(carried(landed / (ends(now) - ends(before))));
            for (inside, interval) in sum.inside.iter_mut().zip(&tail.size.intervals) {
                *inside += f64::from(interval.low <= observed && observed <= interval.high);
            }
            sum.cases += 1.0;
        }
    }
    (sum.cases > 0.0).then(|| Record {
        error: sum.error / sum.cases,
        by_arrivals: sum.by_arrivals / sum.cases,
        by_links: sum.by_links / sum.cases,
        inside: sum.inside.map(|n| n / sum.cases),
        cases: sum.cases,
    })
}

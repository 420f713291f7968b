//! How often the 90 % interval of the preferential share covers the truth, on networks grown by the event simulator.
//!
//! usage: cargo run --release --example mix_coverage -- [graphs a setting, default 200] [nodes, default 200000]
//!
//! The output of a full run is kept in studies/mix_coverage.txt. The graphs of an independent library are checked one by one
//! in tests/core/fit.rs.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

use std::sync::atomic::{AtomicUsize, Ordering};

use tailcast::fit::{Fit, FitRequest, fit};
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, GrowthParameters, Snapshot,
};

const SHARES: [f64; 6] = [0.1, 0.3, 0.5, 0.7, 0.9, 1.0];
const LINKS: [u64; 3] = [1, 3, 8];

#[derive(Clone, Copy, PartialEq)]
enum Evidenced {
    OneSnapshot,
    /// A second snapshot after a quarter more nodes.
    TwoSnapshots,
}

struct Setting {
    evidenced: Evidenced,
    kind: DegreeKind,
    share: f64,
    links: u64,
}

fn main() {
    let mut arguments = std::env::args().skip(1).map(|a| a.parse::<u64>().expect("a whole number"));
    let (graphs, nodes) = (arguments.next().unwrap_or(200), arguments.next().unwrap_or(200_000));
    println!("{graphs} graphs of {nodes} nodes a setting; nominal coverage 90 %\n");
    println!(
        "{:<14} {:<9} {:>5} {:>5} {:>9} {:>9} {:>9} {:>8} {:>9}",
        "evidence", "degree", "links", "p", "mean p", "sd", "mean se", "rms z", "covered"
    );
    for evidenced in [Evidenced::OneSnapshot, Evidenced::TwoSnapshots] {
        for kind in [DegreeKind::Received, DegreeKind::Total] {
            for links in LINKS {
                for share in SHARES {
                    // Received, p = 1 and no first link: nobody starts.
                    if kind == DegreeKind::Total || share < 1.0 {
                        report(&Setting { evidenced, kind, share, links }, graphs, nodes);
                    }
                }
            }
        }
    }
}

fn report(setting: &Setting, graphs: u64, nodes: u64) {
    let next = AtomicUsize::new(0);
    let work = || {
        let mut fits = Vec::new();
        loop {
            let seed = next.fetch_add(1, Ordering::Relaxed) as u64;
            if seed >= graphs {
                return fits;
            }
            fits.push(grow_and_fit(setting, nodes, seed));
        }
    };
    let fits: Vec<Fit> = std::thread::scope(|scope| {
        let threads: Vec<_> = (0..2).map(|_| scope.spawn(work)).collect();
        threads.into_iter().flat_map(|thread| thread.join().expect("a worker")).collect()
    });
    let count = fits.len() as f64;
    let mean = |f: &dyn Fn(&Fit) -> f64| fits.iter().map(f).sum::<f64>() / count;
    let estimate = |f: &Fit| f.preferential_share.value;
    let error = |f: &Fit| 0.5 * (f.share_excursion.1 - f.share_excursion.0);
    let covers = |f: &Fit| {
        let interval = f.preferential_share.interval.expect("a fitted share has an interval");
        f64::from(interval.low <= setting.share && setting.share <= interval.high)
    };
    let average = mean(&estimate);
    println!(
        "{:<14} {:<9} {:>5} {:>5} {:>9.5} {:>9.5} {:>9.5} {:>8.2} {:>8.1}%",
        if setting.evidenced == Evidenced::OneSnapshot { "one snapshot" } else { "two snapshots" },
        if setting.kind == DegreeKind::Received { "received" } else { "total" },
        setting.links,
        setting.share,
        average,
        mean(&|f| (estimate(f) - average).powi(2)).sqrt(),
        mean(&error),
        if setting.share < 1.0 {
            mean(&|f| ((estimate(f) - setting.share) / error(f)).powi(2)).sqrt()
        } else {
            f64::NAN
        },
        100.0 * mean(&covers)
    );
}

fn grow_and_fit(setting: &Setting, nodes: u64, seed: u64) -> Fit {
    let own = if setting.kind == DegreeKind::Total { setting.links } else { 0 };
    let forces = GrowthParameters::new(
        setting.kind,
        AttachmentMix::new(setting.share).expect("a share"),
        ArrivalPlan::constant(1.0).expect("a rate"),
        EntryDegrees::single(own),
        setting.links as f64,
    )
    .expect("sound forces");
    let start = DegreeCounts::from_pairs(&[(own, 1)]).expect("one node");
    let mut network = Simulation::new(&start, forces, seed).expect("a small network");
    let snapshot = |network: &Simulation, as_of: &str| Snapshot {
        as_of: as_of.parse().expect("a date"),
        counts: network.degree_counts().unwrap(),
    };
    network.arrive_many(nodes - 1).expect("room");
    let mut snapshots = vec![snapshot(&network, "2026-01-01T00:00:00Z")];
    if setting.evidenced == Evidenced::TwoSnapshots {
        network.arrive_many(nodes / 4).expect("room");
        snapshots.push(snapshot(&network, "2026-04-01T00:00:00Z"));
    }
    let evidence = Evidence::new(setting.kind, snapshots, None).expect("ordered snapshots");
    fit(&evidence, &FitRequest::default(), &|| false).expect("a fit")
}

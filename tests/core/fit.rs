//! Fits against graphs grown by an independent library (tests/reference/graphs.py) and against real networks.

use std::collections::BTreeMap;

use tailcast::fit::{FitRequest, Rung, fit};
use tailcast::model::{DegreeCounts, DegreeKind, Evidence, Snapshot};

use crate::reference::{number, rows};

fn evidence(kind: DegreeKind, snapshots: &[(&str, Vec<(u64, u64)>)]) -> Evidence {
    let snapshot = |(as_of, pairs): &(&str, Vec<(u64, u64)>)| Snapshot {
        as_of: as_of.parse().unwrap(),
        counts: DegreeCounts::from_pairs(pairs).unwrap(),
    };
    Evidence::new(kind, snapshots.iter().map(snapshot).collect(), None).unwrap()
}

fn kind(name: &str) -> DegreeKind {
    if name == "total" { DegreeKind::Total } else { DegreeKind::Received }
}

/// Grown graphs by (kind, links each, share).
fn grown_graphs() -> BTreeMap<(String, String, String), Vec<(u64, u64)>> {
    let mut graphs: BTreeMap<(String, String, String), Vec<(u64, u64)>> = BTreeMap::new();
    for row in rows("grown_graphs.csv") {
        let key = (row[0].clone(), row[1].clone(), row[2].clone());
        graphs.entry(key).or_default().push((number(&row[4]) as u64, number(&row[5]) as u64));
    }
    graphs
}

#[test]
fn the_mix_of_independently_grown_graphs_is_recovered() {
    let graphs = grown_graphs();
    assert!(graphs.len() >= 30);
    let mut covered = 0;
    for ((name, links, share), pairs) in &graphs {
        let truth = number(share);
        let fit =
            fit(&evidence(kind(name), &[("2026-01-01T00:00:00Z", pairs.clone())]), &FitRequest::default()).unwrap();
        assert_eq!(fit.rung, Rung::OneSnapshot);
        let estimate = fit.preferential_share.value;
        let (low, high) = fit.share_excursion;
        let error = 0.5 * (high - low);
        let interval = fit.preferential_share.interval.unwrap();
        covered += usize::from(interval.low <= truth && truth <= interval.high);
        println!(
            "{name} m={links} p={share}: {estimate:.5} se {error:.5} z {:.2} {:?} {:?}",
            (estimate - truth) / error,
            interval,
            fit.goodness.map(|g| g.p_value)
        );
        assert!((estimate - truth).abs() <= 3.0 * error.max(1e-4), "{name} m={links} p={share}");
    }
    println!("covered {covered} of {}", graphs.len());
}

#[test]
fn real_networks_fit() {
    for (file, column) in [("debian", 1), ("answers", 0)] {
        let mut by_date: BTreeMap<String, Vec<(u64, u64)>> = BTreeMap::new();
        let path = format!("../../examples/data/{file}/degree_counts.csv");
        for row in rows(&path) {
            by_date
                .entry(row[column].clone())
                .or_default()
                .push((number(&row[column + 1]) as u64, number(&row[column + 2]) as u64));
        }
        let all: Vec<(String, Vec<(u64, u64)>)> = by_date.into_iter().collect();
        let dated = |d: &str| if d.contains('T') { d.to_owned() } else { format!("{d}T00:00:00Z") };
        for i in 0..all.len() {
            let one = evidence(DegreeKind::Received, &[(&dated(&all[i].0), all[i].1.clone())]);
            let f = fit(&one, &FitRequest::default()).unwrap();
            println!(
                "{file} {} one: {:?} {:?} {:?}",
                all[i].0,
                f.preferential_share,
                f.goodness,
                f.warnings.iter().map(|w| w.code).collect::<Vec<_>>()
            );
            if i > 0 {
                let pair: Vec<(String, Vec<(u64, u64)>)> =
                    all[i - 1..=i].iter().map(|(d, p)| (dated(d), p.clone())).collect();
                let pair: Vec<(&str, Vec<(u64, u64)>)> = pair.iter().map(|(d, p)| (d.as_str(), p.clone())).collect();
                let clock = std::time::Instant::now();
                let f = fit(&evidence(DegreeKind::Received, &pair), &FitRequest::default()).unwrap();
                println!(
                    "{file} {} two: {:?} links {:?} {:?} {:?} {:?}",
                    all[i].0,
                    f.preferential_share,
                    f.links_per_arrival.value,
                    f.goodness,
                    f.warnings.iter().map(|w| w.code).collect::<Vec<_>>(),
                    clock.elapsed()
                );
                for t in f.tail {
                    print!("{} {} {:.1} | ", t.degree, t.observed, t.fitted);
                }
                println!();
            }
        }
    }
}

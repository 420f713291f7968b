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
            fit(&evidence(kind(name), &[("2026-01-01T00:00:00Z", pairs.clone())]), &FitRequest::default(), &|| false)
                .unwrap();
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

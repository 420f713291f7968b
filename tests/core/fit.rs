//! Fits against graphs grown by an independent library (tests/reference/graphs.py) and by the simulator.

use std::collections::BTreeMap;

use tailcast::fit::{FitRequest, Rung, fit};
use tailcast::growth::Simulation;
use tailcast::model::{DegreeCounts, DegreeKind, Evidence, Snapshot};

use crate::networks::{counts, forces, total_forces};
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
    // Binomial(33, 0.9) lies below 25 once in 200 times.
    assert!(covered >= 25);
}

/// The small version of `studies/mix_coverage.rs`: the mix of the second period, by the flow between two snapshots.
#[test]
fn the_mix_is_recovered_from_the_flow_between_two_snapshots() {
    let (mut covered, mut cases) = (0, 0);
    for (kind, share, links) in [("received", 0.2, 3), ("received", 0.8, 8), ("total", 0.5, 2)] {
        let forces = if kind == "total" { total_forces(share, links) } else { forces(share, links as f64) };
        for seed in 0..12 {
            let start = if kind == "total" { counts(&[(links, 1)]) } else { counts(&[(0, 1)]) };
            let mut network = Simulation::new(&start, forces.clone(), seed).unwrap();
            network.arrive_many(20_000).unwrap();
            let before = network.degree_counts().unwrap();
            network.arrive_many(5_000).unwrap();
            let snapshot = |as_of: &str, counts| Snapshot { as_of: as_of.parse().unwrap(), counts };
            let pair = [
                snapshot("2026-01-01T00:00:00Z", before),
                snapshot("2026-04-01T00:00:00Z", network.degree_counts().unwrap()),
            ];
            let evidence = Evidence::new(self::kind(kind), pair.to_vec(), None).unwrap();
            let fit = fit(&evidence, &FitRequest::default(), &|| false).unwrap();
            assert_eq!(fit.rung, Rung::SuccessiveSnapshots);
            let error = 0.5 * (fit.share_excursion.1 - fit.share_excursion.0);
            assert!((fit.preferential_share.value - share).abs() < 4.5 * error, "{kind} p={share} seed {seed}");
            let interval = fit.preferential_share.interval.unwrap();
            covered += usize::from(interval.low <= share && share <= interval.high);
            cases += 1;
        }
    }
    // Binomial(36, 0.9) lies below 27 once in 100 times.
    assert!(covered >= 27, "{covered} of {cases}");
}

/// One threshold is all but the known total: it cannot tell the mix, and says so by an interval of all shares.
#[test]
fn flows_too_few_to_tell_leave_the_mix_open() {
    let evidence = evidence(
        DegreeKind::Received,
        &[
            ("2026-01-01T00:00:00Z", vec![(0, 1_000), (1, 20)]),
            ("2026-02-01T00:00:00Z", vec![(0, 1_100), (1, 30), (2, 2)]),
        ],
    );
    let fit = fit(&evidence, &FitRequest::default(), &|| false).unwrap();
    let interval = fit.preferential_share.interval.unwrap();
    assert!(interval.high - interval.low > 0.3, "{interval:?}");
    assert!(fit.candidates.iter().all(|c| c.aic.is_finite() && c.weight.is_finite()));
}

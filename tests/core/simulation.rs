//! The event simulator against graphs grown by igraph, and the law of growth against the simulator.

use std::collections::BTreeMap;

use tailcast::growth::{Course, NetworkLaw, Simulation};
use tailcast::numerics::tolerances::Accuracy;

use crate::networks::{counts, forces, total_forces, young_network};
use crate::reference::{number, rows};

/// Edges of the bins in which degree counts are compared.
const EDGES: [u64; 10] = [0, 1, 2, 3, 5, 8, 15, 30, 80, 250];

fn binned(pairs: impl Iterator<Item = (u64, u64)>) -> [f64; EDGES.len()] {
    let mut bins = [0.0; EDGES.len()];
    for (degree, nodes) in pairs {
        bins[EDGES.partition_point(|&edge| edge <= degree) - 1] += nodes as f64;
    }
    bins
}

fn mean_and_variance(samples: &[f64]) -> (f64, f64) {
    let mean = samples.iter().sum::<f64>() / samples.len() as f64;
    (mean, samples.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (samples.len() - 1) as f64)
}

/// Degree kind, links each and preferential share, as the table writes them.
type Setting = (String, String, String);

/// Ten graphs a setting by igraph (tests/reference/graphs.py), forty by the simulator from the same start: one node.
#[test]
fn the_simulator_grows_what_igraph_grows() {
    let mut graphs: BTreeMap<Setting, BTreeMap<String, Vec<(u64, u64)>>> = BTreeMap::new();
    for row in rows("twosample.csv") {
        let setting = (row[0].clone(), row[1].clone(), row[2].clone());
        let graph = graphs.entry(setting).or_default().entry(row[4].clone()).or_default();
        graph.push((number(&row[5]) as u64, number(&row[6]) as u64));
    }
    assert_eq!(graphs.len(), 4);
    for ((kind, links, share), graphs) in graphs {
        let (links, share) = (number(&links), number(&share));
        let forces = if kind == "total" { total_forces(share, links as u64) } else { forces(share, links) };
        let theirs: Vec<_> = graphs.values().map(|pairs| binned(pairs.iter().copied())).collect();
        let ours: Vec<_> = (0..40)
            .map(|seed| {
                let mut network = Simulation::new(&counts(&[(0, 1)]), forces.clone(), seed).unwrap();
                network.arrive_many(19_999).unwrap();
                binned(network.degree_counts().unwrap().iter())
            })
            .collect();
        for bin in 0..EDGES.len() {
            let column = |samples: &[[f64; EDGES.len()]]| samples.iter().map(|s| s[bin]).collect::<Vec<_>>();
            let ((a, var_a), (b, var_b)) = (mean_and_variance(&column(&theirs)), mean_and_variance(&column(&ours)));
            let pooled = ((9.0 * var_a + 39.0 * var_b) / 48.0).max(0.1);
            let t = (a - b) / (pooled * (1.0 / 10.0 + 1.0 / 40.0)).sqrt();
            // 48 degrees of freedom, 40 comparisons: |t| > 4 happens once in 120 such tests.
            assert!(t.abs() < 4.0, "{kind} m={links} p={share} from {} links: {a} and {b}, t = {t}", EDGES[bin]);
        }
    }
}

/// Ten graphs an exponent by igraph, total degree, two links each, no uniform share; twenty by the simulator.
#[test]
fn the_simulator_grows_what_igraph_grows_by_a_power_of_degree() {
    let mut graphs: BTreeMap<String, BTreeMap<String, Vec<(u64, u64)>>> = BTreeMap::new();
    for row in rows("power_graphs.csv") {
        let graph = graphs.entry(row[2].clone()).or_default().entry(row[4].clone()).or_default();
        graph.push((number(&row[5]) as u64, number(&row[6]) as u64));
    }
    assert_eq!(graphs.len(), 2);
    for (exponent, graphs) in graphs {
        let forces = total_forces(1.0, 2).with_kernel_exponent(number(&exponent)).unwrap();
        let theirs: Vec<_> = graphs.values().map(|pairs| binned(pairs.iter().copied())).collect();
        let ours: Vec<_> = (0..20)
            .map(|seed| {
                let mut network = Simulation::new(&counts(&[(0, 1)]), forces.clone(), seed).unwrap();
                network.arrive_many(19_999).unwrap();
                binned(network.degree_counts().unwrap().iter())
            })
            .collect();
        for bin in 2..EDGES.len() {
            let column = |samples: &[[f64; EDGES.len()]]| samples.iter().map(|s| s[bin]).collect::<Vec<_>>();
            let ((a, var_a), (b, var_b)) = (mean_and_variance(&column(&theirs)), mean_and_variance(&column(&ours)));
            let pooled = ((9.0 * var_a + 19.0 * var_b) / 28.0).max(0.1);
            let t = (a - b) / (pooled * (1.0 / 10.0 + 1.0 / 20.0)).sqrt();
            // 28 degrees of freedom, 16 comparisons: |t| > 4.2 happens once in 250 such tests.
            assert!(t.abs() < 4.2, "γ {exponent} from {} links: {a} and {b}, t = {t}", EDGES[bin]);
        }
    }
}

#[test]
fn expected_tails_are_what_the_simulator_shows() {
    let start = young_network();
    const RUNS: u64 = 400;
    for forces in [forces(0.3, 3.0), forces(0.9, 5.0), total_forces(0.7, 3)] {
        let course = Course::new(&start, forces.clone(), 2_000.0).unwrap();
        let runs: Vec<_> = (0..RUNS)
            .map(|seed| {
                let mut network = Simulation::new(&start, forces.clone(), seed).unwrap();
                network.arrive_many(2_000).unwrap();
                network.degree_counts().unwrap()
            })
            .collect();
        for threshold in [1, 3, 10, 30, 100] {
            let tails: Vec<f64> = runs.iter().map(|counts| counts.tail_size(threshold) as f64).collect();
            let (mean, variance) = mean_and_variance(&tails);
            let ours = NetworkLaw::at(&course, &start, 2_000.0).unwrap().tail(threshold, Accuracy::Full).unwrap();
            let z = (mean - ours.mean) / (variance / RUNS as f64).sqrt().max(0.02);
            assert!(z.abs() < 4.5, "threshold {threshold}: simulated {mean}, expected {}, z = {z}", ours.mean);
            // The tail's sampling variance is not understated: nodes compete for links, which only narrows it.
            assert!(variance < 1.4 * ours.variance + 0.2, "threshold {threshold}: {variance} over {}", ours.variance);
        }
    }
}

#[test]
fn the_same_seed_grows_the_same_network() {
    let grow = |seed| {
        let mut network = Simulation::new(&young_network(), forces(0.5, 2.5), seed).unwrap();
        network.run_until(500.0).unwrap();
        network.degree_counts().unwrap()
    };
    assert_eq!(grow(3), grow(3));
    assert_ne!(grow(3), grow(4));
}

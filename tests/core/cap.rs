//! Degree caps and paired networks in the event simulator.

use tailcast::growth::Simulation;
use tailcast::model::{DegreeCap, DegreeCounts, GrowthParameters, RefusedLinks};

use crate::networks::{counts, forces, young_network};

const ARRIVALS: u64 = 2_000;

fn grown(forces: GrowthParameters, cap: Option<DegreeCap>, start: &DegreeCounts, seed: u64) -> DegreeCounts {
    let network = Simulation::new(start, forces, seed).unwrap();
    let mut network = match cap {
        Some(cap) => network.with_cap(cap),
        None => network,
    };
    network.arrive_many(ARRIVALS).unwrap();
    network.degree_counts().unwrap()
}

/// Plain, with growth factors, and with a power kernel: both ways in which ends pick.
fn settings() -> [GrowthParameters; 3] {
    let plain = forces(0.8, 3.0);
    [plain.clone(), plain.clone().with_growth_variance(1.0).unwrap(), plain.with_kernel_exponent(1.1).unwrap()]
}

#[test]
fn nobody_gains_beyond_the_cap() {
    let start = young_network();
    for forces in settings() {
        for refused in [RefusedLinks::Lost, RefusedLinks::Spread] {
            let cap = DegreeCap::new(30, refused).unwrap();
            let after = grown(forces.clone(), Some(cap), &start, 1);
            // The node that had 60 keeps them; all others end at 30.
            assert_eq!((after.tail_size(31), after.tail_size(60), after.tail_size(61)), (1, 1, 0), "{refused:?}");
            assert!(after.tail_size(30) > 5, "the cap is felt");
            let made = after.link_ends() - start.link_ends();
            let meant = u128::from(3 * ARRIVALS);
            match refused {
                RefusedLinks::Spread => assert_eq!(made, meant),
                RefusedLinks::Lost => assert!(made < meant - 100, "{made} of {meant}"),
            }
        }
    }
}

#[test]
fn a_cap_out_of_reach_changes_nothing_but_the_draws() {
    let start = young_network();
    let runs = 200;
    let mean = |cap: Option<DegreeCap>, base: u64| {
        let tail = |seed| grown(forces(0.8, 3.0), cap, &start, base + seed).tail_size(20) as f64;
        let tails: Vec<f64> = (0..runs).map(tail).collect();
        let mean = tails.iter().sum::<f64>() / runs as f64;
        (mean, tails.iter().map(|t| (t - mean).powi(2)).sum::<f64>() / (runs * (runs - 1)) as f64)
    };
    let (capped, free) = (mean(DegreeCap::new(1 << 40, RefusedLinks::Spread).ok(), 0), mean(None, 10_000));
    let z = (capped.0 - free.0) / (capped.1 + free.1).sqrt();
    assert!(z.abs() < 4.0, "{capped:?} and {free:?}");
}

#[test]
fn where_all_are_full_links_are_lost() {
    let cap = DegreeCap::new(1, RefusedLinks::Spread).unwrap();
    let mut network = Simulation::new(&counts(&[(0, 10)]), forces(0.5, 3.0), 4).unwrap().with_cap(cap);
    network.arrive_many(50).unwrap();
    let after = network.degree_counts().unwrap();
    // Every arrival fills all that are there, and the newcomer itself is still free.
    assert_eq!((after.tail_size(2), after.tail_size(1), after.nodes()), (0, 59, 60));
}

/// The listing behind many refusals picks by the mix as repeated picking does: here only two of 3,000 nodes are below the cap.
#[test]
fn the_last_open_nodes_are_picked_by_the_mix() {
    let cap = DegreeCap::new(5, RefusedLinks::Spread).unwrap();
    let runs = 2_000;
    let to_larger = (0..runs).filter(|&seed| {
        // Total 15,003 ends; chances of the open two are in proportion to ½/N + ½·k/K, k of 0 and 3.
        let start = counts(&[(0, 1), (3, 1), (5, 3_000)]);
        let mut network = Simulation::new(&start, forces(0.5, 1.0), seed).unwrap().with_cap(cap);
        network.arrive_many(1).unwrap();
        network.degree_counts().unwrap().tail_size(4) == 3_001
    });
    let (nodes, ends) = (3_002.0, 15_003.0);
    let expected = (1.0 / nodes + 3.0 / ends) / (2.0 / nodes + 3.0 / ends);
    let z = (to_larger.count() as f64 - f64::from(runs as u32) * expected)
        / (f64::from(runs as u32) * expected * (1.0 - expected)).sqrt();
    assert!(z.abs() < 4.0, "z = {z}");
}

fn paired(share: f64, seed: u64) -> DegreeCounts {
    let mut network = Simulation::paired(&young_network(), forces(share, 2.5), seed).unwrap();
    network.run_until(500.0).unwrap();
    network.degree_counts().unwrap()
}

#[test]
fn pairs_of_equal_forces_are_equal() {
    assert_eq!(paired(0.7, 5), paired(0.7, 5));
    assert_ne!(paired(0.7, 5), paired(0.7, 6));
    // A stop on the way is no event.
    let mut network = Simulation::paired(&young_network(), forces(0.7, 2.5), 5).unwrap();
    for day in [100.0, 250.5, 500.0] {
        network.run_until(day).unwrap();
    }
    assert_eq!(network.degree_counts().unwrap(), paired(0.7, 5));
}

#[test]
fn pairs_show_a_small_difference_that_independent_runs_hide() {
    const PAIRS: u64 = 500;
    let tail = |share, seed| paired(share, seed).tail_size(15) as f64;
    let variance = |differences: &[f64]| {
        let mean = differences.iter().sum::<f64>() / PAIRS as f64;
        differences.iter().map(|d| (d - mean).powi(2)).sum::<f64>() / (PAIRS - 1) as f64
    };
    let together: Vec<f64> = (0..PAIRS).map(|seed| tail(0.71, seed) - tail(0.70, seed)).collect();
    let apart: Vec<f64> = (0..PAIRS).map(|seed| tail(0.71, seed) - tail(0.70, seed + PAIRS)).collect();
    let (together, apart) = (variance(&together), variance(&apart));
    println!("variance of the difference: paired {together}, independent {apart}");
    assert!(together < 0.5 * apart, "{together} and {apart}");
}

/// Paired networks are networks like any other: the same law as unpaired ones, losses included.
#[test]
fn a_paired_network_has_the_law_of_an_unpaired_one() {
    let losing = forces(0.7, 2.5).with_losses(0.0005, 0.0005).unwrap();
    for forces in [forces(0.7, 2.5), losing] {
        let sample = |grow: &dyn Fn(u64) -> Simulation| {
            let tails: Vec<f64> = (0..300)
                .map(|seed| {
                    let mut network = grow(seed);
                    network.run_until(500.0).unwrap();
                    network.degree_counts().unwrap().tail_size(10) as f64
                })
                .collect();
            let mean = tails.iter().sum::<f64>() / 300.0;
            (mean, tails.iter().map(|t| (t - mean).powi(2)).sum::<f64>() / (299.0 * 300.0))
        };
        let one = sample(&|seed| Simulation::paired(&young_network(), forces.clone(), seed).unwrap());
        let other = sample(&|seed| Simulation::new(&young_network(), forces.clone(), seed + 1_000).unwrap());
        let z = (one.0 - other.0) / (one.1 + other.1).sqrt();
        assert!(z.abs() < 4.0, "{one:?} and {other:?}");
    }
}

//! First passages of one node, against its law and the event simulator.

use nalgebra::DMatrix;
use tailcast::growth::{Course, NodeLaw, Passage, Simulation};
use tailcast::model::{ArrivalPlan, DegreeCounts, GrowthParameters};

use crate::networks::{counts, forces, young_network};

fn course(forces: GrowthParameters, start: &DegreeCounts, days: f64) -> Course {
    Course::new(start, forces, days).unwrap()
}

#[test]
fn where_links_last_passing_is_being_there() {
    let course = course(forces(0.7, 3.0), &young_network(), 800.0);
    let days = [100.0, 400.0, 800.0];
    for (degree, threshold) in [(0, 5), (8, 15), (20, 40)] {
        let reached = Passage::of(&course, 1.0, degree, threshold, &days).unwrap();
        for (day, reached) in days.iter().zip(reached) {
            let tail = NodeLaw::between(&course, 0.0, *day).tail(degree, threshold).unwrap();
            assert!((reached - tail).abs() < 1e-9, "{degree} to {threshold} by {day}: {reached} and {tail}");
        }
    }
    assert_eq!(Passage::of(&course, 1.0, 20, 20, &days).unwrap(), vec![1.0; 3]);
}

/// A vanishing loss hazard goes through the integral equation and must give what no loss gives.
#[test]
fn the_integral_equation_meets_the_law_as_losses_vanish() {
    let plain = course(forces(0.7, 3.0), &young_network(), 800.0);
    let losing = course(forces(0.7, 3.0).with_losses(0.0, 1e-9).unwrap(), &young_network(), 800.0);
    for (degree, threshold) in [(0, 5), (8, 15), (20, 40)] {
        let days = [200.0, 800.0];
        let [a, b] = [&plain, &losing].map(|course| Passage::of(course, 1.0, degree, threshold, &days).unwrap());
        assert!(a.iter().zip(&b).all(|(a, b)| (a - b).abs() < 1e-4), "{a:?} and {b:?}");
    }
}

#[test]
fn passages_only_grow_with_time_and_shrink_with_the_threshold() {
    let losing = course(forces(0.7, 3.0).with_losses(0.0005, 0.002).unwrap(), &young_network(), 600.0);
    let days: Vec<f64> = (1..=6).map(|i| 100.0 * f64::from(i)).collect();
    let mut above = vec![1.0; days.len()];
    for threshold in [21, 23, 26, 30] {
        let reached = Passage::of(&losing, 1.0, 20, threshold, &days).unwrap();
        assert!(reached.is_sorted());
        assert!(reached.iter().zip(&above).all(|(a, b)| a <= b), "{threshold}: {reached:?} over {above:?}");
        // Whoever is there now and has stayed has passed.
        let staying = losing.survival(600.0) * NodeLaw::between(&losing, 0.0, 600.0).tail(20, threshold).unwrap();
        assert!(reached[5] >= staying - 1e-3, "{threshold}: {} below {staying}", reached[5]);
        above = reached;
    }
}

/// 100 nodes with 20 links among others, 2,000 runs: how many have had the threshold by the day, departed ones included.
/// Nodes of a run compete for links, so the error is taken from the scatter between runs.
#[test]
fn passages_with_losses_are_what_the_simulator_shows() {
    const RUNS: u64 = 2_000;
    let start = counts(&[(0, 400), (2, 300), (6, 200), (20, 100)]);
    for (departures, losses) in [(0.0, 0.0006), (0.002, 0.0), (0.0005, 0.0008)] {
        let forces = forces(0.7, 3.0).with_losses(departures, losses).unwrap();
        let (day, thresholds) = (300.0, [21, 23, 26, 30]);
        let course = course(forces.clone(), &start, day);
        let mut shares = [const { Vec::new() }; 4];
        for seed in 0..RUNS {
            let mut network = Simulation::new(&start, forces.clone(), seed).unwrap();
            network.watch_peaks();
            network.run_until(day).unwrap();
            let peaks = network.peaks();
            assert_eq!(peaks.len(), 1_000);
            for (threshold, shares) in thresholds.iter().zip(&mut shares) {
                let passed = peaks.iter().filter(|&&(before, peak)| before == 20 && peak >= *threshold).count();
                shares.push(passed as f64 / 100.0);
            }
        }
        for (threshold, shares) in thresholds.iter().zip(&shares) {
            let mean = shares.iter().sum::<f64>() / RUNS as f64;
            let error = (shares.iter().map(|s| (s - mean).powi(2)).sum::<f64>() / (RUNS * (RUNS - 1)) as f64).sqrt();
            let ours = Passage::of(&course, 1.0, 20, *threshold, &[day]).unwrap()[0];
            // Where few pass the scatter of few runs says little: no less than that of rare independent events.
            let error = error.max((ours / (100 * RUNS) as f64).sqrt());
            let z = (ours - mean) / error;
            println!("δ {departures} w {losses} to {threshold}: {ours} and {mean} ± {error}, z = {z}");
            assert!(z.abs() < 4.0, "δ {departures} w {losses} to {threshold}: {ours} and {mean} ± {error}, z = {z}");
        }
    }
}

#[test]
fn large_hubs_cost_no_more_than_small_ones() {
    let start = counts(&[(1, 500_000), (900, 100), (100_000, 1)]);
    let forces = forces(0.8, 3.0).with_losses(0.0, 0.0003).unwrap();
    let forces = forces.with_arrivals(ArrivalPlan::constant(800.0).unwrap());
    let course = course(forces, &start, 730.0);
    for (degree, threshold) in [(900, 1_000), (900, 2_200), (100_000, 200_000), (100_000, 225_000)] {
        let started = std::time::Instant::now();
        let reached = Passage::of(&course, 1.0, degree, threshold, &[365.0, 730.0]).unwrap();
        println!("{degree} to {threshold}: {reached:?} in {:?}", started.elapsed());
        assert!(reached.is_sorted());
        let there = NodeLaw::between(&course, 0.0, 730.0).tail(degree, threshold).unwrap();
        assert!(reached[1] >= there - 1e-3, "{degree} to {threshold}: {reached:?}, there {there}");
    }
}

/// Links that land uniformly at a constant rate a node and are lost one by one: the master equation with the threshold
/// absorbing and departure as a state of its own, by matrix exponential. Nodes hover below the threshold here, so the last
/// passage and the first are far apart.
#[test]
fn passages_of_hovering_nodes_are_those_of_the_master_equation() {
    let start = counts(&[(10, 1_000_000)]);
    for departures in [0.0, 0.01] {
        let (gain, loss) = (0.5, 0.05);
        let forces = forces(0.0, 0.0)
            .with_arrivals(ArrivalPlan::constant(1e-6).unwrap())
            .with_links_per_node_day(gain)
            .unwrap()
            .with_losses(departures, loss)
            .unwrap();
        let course = course(forces, &start, 200.0);
        for (degree, threshold) in [(10, 13), (10, 18), (2, 8)] {
            let (days, size) = ([20.0, 60.0, 200.0], threshold as usize + 1);
            let generator = DMatrix::from_fn(size, size, |to, from| match from {
                from if from + 1 == size => 0.0,
                from if to == from + 1 => gain,
                from if to + 1 == from => loss * from as f64,
                from if to == from => -(gain + loss * from as f64 + departures),
                _ => 0.0,
            });
            let reached = Passage::of(&course, 1.0, degree, threshold, &days).unwrap();
            for (day, reached) in days.iter().zip(&reached) {
                let exact = (&generator * *day).exp()[(size - 1, degree as usize)];
                println!("δ {departures}, {degree} to {threshold} by {day}: {reached} and {exact}");
                assert!((reached - exact).abs() < 1e-3, "{degree} to {threshold} by {day}: {reached} and {exact}");
            }
        }
    }
}

//! What-ifs and caps against simulated networks.

use super::scene::{ask, forces, grown};
use tailcast::growth::Simulation;
use tailcast::model::{
    AttachmentMix, Change, DegreeCap, DegreeCounts, GrowthParameters, Questions, RefusedLinks, Shift,
};

const RUNS: u64 = 2_000;
const DAY: f64 = 200.0;

fn tails(counts: &DegreeCounts, forces: &GrowthParameters, thresholds: &[u64], paired: bool, seed: u64) -> Vec<f64> {
    let new = if paired { Simulation::paired } else { Simulation::new };
    let mut network = new(counts, forces.clone(), seed).unwrap();
    network.run_until(DAY).unwrap();
    thresholds.iter().map(|&threshold| network.tail_size(threshold) as f64).collect()
}

fn moments(values: impl Iterator<Item = f64> + Clone) -> (f64, f64) {
    let count = values.clone().count() as f64;
    let mean = values.clone().sum::<f64>() / count;
    (mean, values.map(|v| (v - mean).powi(2)).sum::<f64>() / (count - 1.0))
}

/// Nearly equal mixes: the sign of the difference shows in paired runs and in the answer, and would not in as many independent runs.
#[test]
fn a_small_difference_shows_above_the_noise() {
    let before = forces(0.70);
    let counts = grown(&before);
    let mix = AttachmentMix::new(0.71).unwrap();
    let change = Change { mix: Some(mix), ..Change::none("a little more preferential") };
    let questions = Questions { scenarios: vec![change.clone()], ..Questions::default() };
    let answer = ask(&counts, &before, &[10], &[DAY], questions).scenarios.remove(0);
    let row = &answer.dates[0].tail[0];
    let after = change.apply(&before).unwrap();
    let differences = |paired: bool| -> Vec<f64> {
        let one = |seed: u64| {
            let other = if paired { seed } else { seed + 1_000_000 };
            tails(&counts, &after, &[10], paired, other)[0] - tails(&counts, &before, &[10], paired, seed)[0]
        };
        (0..RUNS).map(one).collect()
    };
    let (paired, independent) = (differences(true), differences(false));
    let (mean, variance) = moments(paired.iter().copied());
    let (_, variance_independent) = moments(independent.iter().copied());
    eprintln!(
        "{}: {:.3} paired variance {:.2} independent {:.2}; simulated {mean:.3}, {variance:.2} and {variance_independent:.2}; {:?}",
        answer.verdict,
        row.difference.expected,
        row.paired_variance,
        row.independent_variance,
        row.difference.intervals
    );
    assert!((row.difference.expected - mean).abs() < 4.0 * (variance / RUNS as f64).sqrt());
    assert!((row.independent_variance / variance_independent - 1.0).abs() < 0.15);
    assert!(row.paired_variance < variance && variance < 0.5 * variance_independent);
    // The answer tells the sign at 90 %; one pair of independent runs could not: their deviation is several times the difference.
    let interval = row.difference.intervals.last().unwrap();
    assert!(interval.low.signum() == interval.high.signum(), "{interval:?}");
    assert!(row.independent_variance.sqrt() > 2.0 * row.difference.expected.abs());
}

fn check_cap(refused: RefusedLinks, forces: &GrowthParameters, slack: f64) {
    let counts = grown(&super::scene::forces(0.7));
    let cap = DegreeCap::new(25, refused).unwrap();
    let change = Change { degree_cap: Some(cap), ..Change::none("cap") };
    let thresholds = [1, 5, 10, 20, 25];
    let mut asked = thresholds.to_vec();
    asked.push(26);
    let questions = Questions { scenarios: vec![change.clone()], ..Questions::default() };
    let answer = ask(&counts, forces, &asked, &[DAY], questions).scenarios.remove(0);
    let capped = change.apply(forces).unwrap();
    let runs: Vec<Vec<f64>> = (0..RUNS).map(|seed| tails(&counts, &capped, &asked, false, seed)).collect();
    eprintln!("{}", answer.verdict);
    for (i, row) in answer.dates[0].tail.iter().enumerate() {
        let (mean, variance) = moments(runs.iter().map(|run| run[i]));
        let error = (variance / RUNS as f64).sqrt();
        eprintln!(
            "{} {:?}: standing {:.2} capped {:.2} seen {mean:.2} ± {error:.2}",
            row.threshold, refused, row.standing, row.scenario
        );
        assert!(
            (row.scenario - mean).abs() < 4.0 * error + slack * mean,
            "{}: {} seen {mean}",
            row.threshold,
            row.scenario
        );
    }
}

#[test]
fn a_cap_that_spreads_or_loses_what_it_refuses() {
    check_cap(RefusedLinks::Spread, &forces(0.7), 1e-3);
    check_cap(RefusedLinks::Lost, &forces(0.7), 1e-3);
}

/// Under losses a capped node that loses a link gains again: the law takes that to first order.
#[test]
fn a_cap_on_a_network_with_losses_is_within_a_few_per_cent() {
    let forces = forces(0.7).with_losses(0.001, 0.001).unwrap();
    check_cap(RefusedLinks::Spread, &forces, 0.03);
    check_cap(RefusedLinks::Lost, &forces, 0.03);
}

#[test]
fn changes_of_rates_departures_and_mix_are_what_the_forces_say() {
    let before = forces(0.7);
    let counts = grown(&before);
    let mut change = Change::none("all at once");
    change.arrivals = Some(Shift::Factor(1.5));
    change.links_per_arrival = Some(Shift::To(2.0));
    change.departures_per_node_day = Some(0.002);
    change.mix = AttachmentMix::new(0.3);
    let questions = Questions { scenarios: vec![change.clone()], ..Questions::default() };
    let answer = ask(&counts, &before, &[5, 20], &[DAY], questions).scenarios.remove(0);
    let after = change.apply(&before).unwrap();
    let runs: Vec<Vec<f64>> = (0..RUNS).map(|seed| tails(&counts, &after, &[5, 20], false, seed)).collect();
    for (i, row) in answer.dates[0].tail.iter().enumerate() {
        let (mean, variance) = moments(runs.iter().map(|run| run[i]));
        assert!(
            (row.scenario - mean).abs() < 4.0 * (variance / RUNS as f64).sqrt() + 1e-3 * mean,
            "{row:?} seen {mean}"
        );
    }
}

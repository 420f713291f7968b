//! Limits against simulated paths.

use super::scene::{after, ask, assert_share, forces, grown, simulate};
use tailcast::evaluate::LimitAnswer;
use tailcast::model::{ArrivalPlan, DegreeCounts, GrowthParameters, Limit, Questions};

const RUNS: u64 = 2_000;
const HORIZON: f64 = 200.0;

fn answer(counts: &DegreeCounts, forces: &GrowthParameters, threshold: u64, most: u64, risk: f64) -> LimitAnswer {
    let limit = Limit::new(None, threshold, most, after(HORIZON), risk).unwrap();
    let questions = Questions { limits: vec![limit], ..Questions::default() };
    let days = [50.0, 100.0, 150.0, HORIZON];
    ask(counts, forces, &[threshold], &days, questions).limits.remove(0)
}

/// The day of each run's first crossing, looked for 500 times.
fn crossings(counts: &DegreeCounts, forces: &GrowthParameters, threshold: u64, most: u64) -> Vec<f64> {
    let days: Vec<f64> = (1..=500).map(|i| HORIZON * i as f64 / 500.0).collect();
    let mut first = vec![f64::INFINITY; RUNS as usize];
    simulate(counts, forces, RUNS, &days, |run, i, network| {
        if first[run as usize].is_infinite() && network.tail_size(threshold) > most {
            first[run as usize] = days[i];
        }
    });
    first
}

fn check(counts: &DegreeCounts, forces: &GrowthParameters, threshold: u64, most: u64) {
    let found = answer(counts, forces, threshold, most, 0.05);
    let first = crossings(counts, forces, threshold, most);
    let by = |day: f64| first.iter().filter(|&&crossed| crossed <= day).count() as u64;
    eprintln!("{} {:?} monotone {}", found.now, found.verdict, found.monotone);
    for (at, day) in found.dates.iter().zip([50.0, 100.0, 150.0, HORIZON]) {
        eprintln!(
            "day {day}: exceeding {:.4} crossed {:.4} seen {:.4}",
            at.exceeding,
            at.crossed,
            by(day) as f64 / RUNS as f64
        );
    }
    for at in &found.crossing {
        if let Some(date) = at.date {
            let day = tailcast::model::days_between(after(0.0), date);
            eprintln!("p {}: day {day:.1} seen {:.4}", at.probability, by(day) as f64 / RUNS as f64);
        }
    }
    eprintln!("{:?}\n{:?}", found.arrivals, found.links_per_arrival);
    for (at, day) in found.dates.iter().zip([50.0, 100.0, 150.0, HORIZON]) {
        assert_share(by(day), RUNS, at.crossed, "crossed");
    }
}

#[test]
fn crossings_of_a_tail_that_only_grows() {
    let forces = forces(0.7);
    let counts = grown(&forces);
    let now = counts.tail_size(20);
    check(&counts, &forces, 20, now + 25);
}

#[test]
fn crossings_of_a_tail_that_can_shrink() {
    let forces = forces(0.7).with_losses(0.001, 0.002).unwrap();
    let counts = grown(&super::scene::forces(0.7));
    let now = counts.tail_size(20);
    check(&counts, &forces, 20, now + 6);
}

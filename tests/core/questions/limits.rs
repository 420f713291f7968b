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

/// The rate that is said to keep the risk keeps it: by the forecast exactly, by simulation within its error.
fn check_rates(counts: &DegreeCounts, forces: &GrowthParameters, threshold: u64, most: u64) {
    let risk = 0.2;
    let found = answer(counts, forces, threshold, most, risk);
    let rate = found.arrivals.rate.unwrap();
    let slower = forces.clone().with_arrivals(ArrivalPlan::constant(rate).unwrap());
    let links = found.links_per_arrival.rate.unwrap();
    let fewer = forces.clone().with_links_per_arrival(links).unwrap();
    for (forces, what) in [(&slower, "arrivals"), (&fewer, "links")] {
        let again = answer(counts, forces, threshold, most, risk).at_by.crossed;
        eprintln!("{what}: again {again}");
        assert!((again - risk).abs() < 1e-6, "{what}: {again}");
        let crossed = crossings(counts, forces, threshold, most).iter().filter(|day| day.is_finite()).count() as u64;
        eprintln!("{what}: simulated {}", crossed as f64 / RUNS as f64);
        assert_share(crossed, RUNS, risk, what);
    }
    let interval = found.arrivals.interval.unwrap();
    assert!(interval.low <= rate && rate <= interval.high);
}

#[test]
fn sustainable_rates_keep_the_risk() {
    let forces = forces(0.7);
    let counts = grown(&forces);
    check_rates(&counts, &forces, 20, counts.tail_size(20) + 25);
}

#[test]
fn sustainable_rates_keep_the_risk_of_a_tail_that_can_shrink() {
    let counts = grown(&forces(0.7));
    let forces = forces(0.7).with_losses(0.001, 0.002).unwrap();
    check_rates(&counts, &forces, 20, counts.tail_size(20) + 6);
}

#[test]
fn impossible_limits_are_answered_with_what_comes_nearest() {
    let forces = forces(0.7);
    let counts = grown(&forces);
    let now = counts.tail_size(20);
    let passed = answer(&counts, &forces, 20, now - 1, 0.05);
    assert!(passed.verdict.contains("passed already") && passed.verdict.contains("would keep"), "{}", passed.verdict);
    assert!(passed.headroom == -1.0 && passed.at_by.crossed == 1.0 && passed.days_left == Some(0.0));
    assert!(passed.arrivals.rate.is_none() && passed.arrivals.detail.contains("passed already"));
    let certain = answer(&counts, &forces, 20, now + 25, 0.0);
    assert!(certain.arrivals.rate.is_none() && certain.arrivals.detail.contains("nearest"), "{:?}", certain.arrivals);
    // Links that land per node and day do not mind arrivals.
    let busy = forces.clone().with_links_per_node_day(0.02).unwrap();
    let helpless = answer(&counts, &busy, 20, now + 25, 0.05);
    assert!(helpless.arrivals.rate.is_none() && helpless.arrivals.detail.contains("even with none"), "{helpless:?}");
    let far = answer(&counts, &forces, 20, 1_000_000, 0.05);
    assert!(far.arrivals.rate.is_none() && far.arrivals.detail.contains("64 times"), "{:?}", far.arrivals);
}

/// A tail that is empty today, in a network that loses links, and arrivals that may stop.
#[test]
fn a_limit_past_the_largest_degree_is_answered() {
    let counts = grown(&forces(0.7));
    let forces = forces(0.7).with_losses(0.001, 0.002).unwrap();
    let found = answer(&counts, &forces, counts.largest() + 200, 0, 0.05);
    assert!(found.now == 0 && found.at_by.crossed < 0.05, "{found:?}");
    let none = forces.with_arrivals(ArrivalPlan::none());
    let still = answer(&counts, &none, counts.largest() + 200, 0, 0.05);
    assert!(still.at_by.crossed < 1e-3 && still.arrivals.rate.is_none(), "{still:?}");
}

/// Hubs that hardly move at first, far below a limit: a path that starts in small steps does not leap.
#[test]
fn a_far_limit_is_not_crossed_by_the_scale_of_the_first_days() {
    let mut pairs: Vec<(u64, u64)> = grown(&forces(0.7)).iter().filter(|&(k, _)| k < 30).collect();
    pairs.extend([(200, 5), (400, 2)]);
    let counts = DegreeCounts::from_pairs(&pairs).unwrap();
    let forces = forces(0.7).with_losses(1e-5, 1e-5).unwrap();
    let found = answer(&counts, &forces, 100, 12, 0.05);
    assert!(found.now == 7 && found.at_by.crossed < 1e-3, "{found:?}");
}

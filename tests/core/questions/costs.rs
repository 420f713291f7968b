//! Costs by bands against simulated networks.

use super::scene::{ask, forces, grown, simulate};
use tailcast::model::{Band, Bands, DegreeCounts, GrowthParameters, Questions};

const RUNS: u64 = 2_000;
const DAY: f64 = 150.0;

fn bands() -> Bands {
    let band = |from, to, per_node, per_link| Band { from, to, per_node, per_link };
    let bands = [band(0, Some(4), 0.01, 0.0), band(5, Some(29), 0.2, 0.001), band(30, None, 4.0, 0.05)];
    Bands::new(Some("EUR".into()), &bands).unwrap()
}

fn check(counts: &DegreeCounts, forces: &GrowthParameters, slack: f64) {
    let bands = bands();
    let questions = Questions { bands: Some(bands.clone()), ..Questions::default() };
    let answer = ask(counts, forces, &[5], &[DAY], questions).bands.unwrap();
    let at = &answer.dates[0];
    let mut totals = Vec::new();
    let mut by_band = [0.0; 3];
    let mut links = [0.0; 3];
    simulate(counts, forces, RUNS, &[DAY], |_, _, network| {
        let then = network.degree_counts().unwrap();
        totals.push(then.iter().map(|(k, n)| n as f64 * bands.cost(k)).sum::<f64>());
        for (i, band) in bands.bands().iter().enumerate() {
            let held = then.iter().filter(|&(k, _)| k >= band.from && band.to.is_none_or(|to| k <= to));
            for (k, n) in held {
                by_band[i] += n as f64 * bands.cost(k) / RUNS as f64;
                links[i] += (n * k) as f64 / RUNS as f64;
            }
        }
    });
    let mean = totals.iter().sum::<f64>() / RUNS as f64;
    let variance = totals.iter().map(|t| (t - mean).powi(2)).sum::<f64>() / (RUNS - 1) as f64;
    let error = (variance / RUNS as f64).sqrt();
    eprintln!("total {:.3} seen {mean:.3} ± {error:.3}; {:?}", at.total.expected, at.total.intervals);
    assert!((at.total.expected - mean).abs() < 4.0 * error + 1e-3 * mean, "{} against {mean}", at.total.expected);
    for ((band, seen), links) in at.bands.iter().zip(by_band).zip(links) {
        eprintln!(
            "band {}: cost {:.3} seen {seen:.3}; links {:.1} seen {links:.1}",
            band.from, band.cost.expected, band.links
        );
        assert!((band.cost.expected / seen - 1.0).abs() < 0.01);
        assert!((band.links / links - 1.0).abs() < 0.01);
    }
    for interval in &at.total.intervals {
        let inside = totals.iter().filter(|&&t| t >= interval.low && t <= interval.high).count() as f64 / RUNS as f64;
        eprintln!("{} covered {inside}", interval.level);
        assert!((inside - interval.level).abs() < slack, "{inside} inside at {}", interval.level);
    }
}

#[test]
fn costs_of_a_network_that_only_grows() {
    let forces = forces(0.7);
    check(&grown(&forces), &forces, 0.03);
}

#[test]
fn costs_of_a_network_that_loses_nodes_and_links() {
    let counts = grown(&forces(0.7));
    // Nodes compete for the ends that land, which their independent laws leave out: intervals come out a little wide.
    check(&counts, &forces(0.7).with_losses(0.001, 0.002).unwrap(), 0.07);
}

/// Without growth the costs are those of today, by addition.
#[test]
fn costs_today_are_the_sum_over_the_counts() {
    let counts = DegreeCounts::from_pairs(&[(0, 100), (4, 10), (5, 3), (29, 2), (30, 1), (100, 1)]).unwrap();
    let none = forces(0.7).with_arrivals(tailcast::model::ArrivalPlan::none());
    let questions = Questions { bands: Some(bands()), ..Questions::default() };
    let answer = ask(&counts, &none, &[5], &[DAY], questions).bands.unwrap();
    let expected = 110.0 * 0.01 + (5.0 * 0.2 + (15.0 + 58.0) * 0.001) + (2.0 * 4.0 + 130.0 * 0.05);
    assert!((answer.now - expected).abs() < 1e-9);
    assert!((answer.dates[0].total.expected - expected).abs() < 1e-9, "{:?}", answer.dates[0]);
}

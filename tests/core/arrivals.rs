//! Forecasts of arrivals and of links per arrival: exact cases, invariances, widening, coverage.

use rand::{RngExt, SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, Normal, Poisson};
use tailcast::evaluate::{
    RateHistory, RatePeriod, arrival_periods, forecast_arrivals, forecast_links_per_arrival, link_periods,
};
use tailcast::model::{DegreeKind, Evidence, Snapshot};

use crate::networks::{counts, evidence, forces, snapshots};
use crate::reference::relative_error;

fn month(events: f64) -> RatePeriod {
    RatePeriod { days: 30.0, events, exposure: 30.0 }
}

fn rate_over(periods: &[RatePeriod], days: f64) -> f64 {
    RateHistory::new(periods).unwrap().mean_over(days).rate
}

/// Snapshots `days` apart with so many nodes, each of one link.
fn history(nodes: &[u64], days: i64) -> Evidence {
    let start: jiff::Timestamp = "2020-01-01T00:00:00Z".parse().unwrap();
    let snapshot = |(i, &n): (usize, &u64)| Snapshot {
        as_of: start + jiff::SignedDuration::from_hours(24 * days * i as i64),
        counts: counts(&[(1, n)]),
    };
    evidence(DegreeKind::Received, &nodes.iter().enumerate().map(snapshot).collect::<Vec<_>>())
}

#[test]
fn a_constant_history_goes_on() {
    let forecast = forecast_arrivals(&history(&[1_000, 1_600, 2_200, 2_800], 30), 0.0, 365.0).unwrap();
    assert_eq!(forecast.central.segments().len(), 1);
    assert!(relative_error(forecast.central.rate(100.0), 20.0) < 1e-9);
    assert!(forecast.detail.contains("20.0 a day expected"), "{}", forecast.detail);
    // Few events, too: the likeliest rate given a level is then the level.
    assert!(relative_error(rate_over(&[month(6.0); 5], 90.0), 0.2) < 1e-6);
}

#[test]
fn departures_are_made_up_for() {
    // dN/dt = A − δN with A = 10 and δ = 0.001: N moves to 10,000.
    let nodes = [4_000.0, 4_000.0 * (-0.1f64).exp() + 10_000.0 * (1.0 - (-0.1f64).exp())].map(|n| n.round() as u64);
    let periods = arrival_periods(&history(&nodes, 100), 0.001);
    assert!(relative_error(periods[0].events, 1_000.0) < 1e-3, "{periods:?}");
    // Without them the fall is no negative rate.
    let fallen = forecast_arrivals(&history(&[5_000, 4_000], 30), 0.0, 365.0).unwrap();
    assert!(fallen.central.rate(10.0) >= 0.0 && fallen.central.rate(10.0) < 0.1);
    assert!(fallen.detail.contains("1 period(s) show no arrivals"), "{}", fallen.detail);
}

#[test]
fn landed_links_make_up_for_what_departing_nodes_take_along() {
    // Links received, δ = 0.001 and w = 0.002 over 100 days: dK/dt = L − 0.003·K with L = 50.
    let decay = (-0.3f64).exp();
    let ends = 8_000.0 * decay + 50.0 * (1.0 - decay) / 0.003;
    let nodes = 10_000.0 * (1.0 - (-0.1f64).exp()) + 8_000.0 * (-0.1f64).exp();
    let after = counts(&[(0, (nodes - ends / 4.0).round() as u64), (4, (ends / 4.0).round() as u64)]);
    let mut snapshots = history(&[8_000, 8_001], 100).snapshots().to_vec();
    snapshots[1].counts = after;
    let forces = forces(0.5, 1.0).with_losses(0.001, 0.002).unwrap();
    let periods = link_periods(&evidence(DegreeKind::Received, &snapshots), &forces);
    assert!(relative_error(periods[0].events, 5_000.0) < 2e-3 && relative_error(periods[0].exposure, 1_000.0) < 2e-3);
}

#[test]
fn one_snapshot_shows_no_arrivals_and_one_period_says_so() {
    assert_eq!(forecast_arrivals(&history(&[1_000], 30), 0.0, 365.0), None);
    let one = forecast_arrivals(&history(&[1_000, 1_300], 30), 0.0, 30.0).unwrap();
    assert!(relative_error(one.central.rate(10.0), 10.0) < 1e-9);
    let spread = one.high.arrivals_between(0.0, 30.0) / one.central.arrivals_between(0.0, 30.0);
    assert!(spread > 1.1 && spread < 1.6, "{spread}");
    assert!(one.detail.contains("stated default"), "{}", one.detail);
}

#[test]
fn units_of_time_and_of_events_do_not_matter() {
    let events = [800.0, 950.0, 900.0, 1_300.0, 1_250.0, 1_700.0].map(|n| n * 1e4);
    let base: Vec<RatePeriod> = events.map(month).to_vec();
    let slower: Vec<RatePeriod> =
        base.iter().map(|p| RatePeriod { days: 7.0 * p.days, events: p.events, exposure: 7.0 * p.exposure }).collect();
    let larger: Vec<RatePeriod> = base.iter().map(|p| RatePeriod { events: 100.0 * p.events, ..*p }).collect();
    let outlook = |periods: &[RatePeriod], days: f64| RateHistory::new(periods).unwrap().mean_over(days);
    let (of_base, of_slower, of_larger) = (outlook(&base, 90.0), outlook(&slower, 630.0), outlook(&larger, 90.0));
    assert!(relative_error(of_slower.rate * 7.0, of_base.rate) < 1e-9);
    assert!(relative_error(of_slower.log_deviation, of_base.log_deviation) < 1e-6);
    // Counting noise of 10⁷ events is negligible but not nothing.
    assert!(relative_error(of_larger.rate, 100.0 * of_base.rate) < 1e-4);
}

#[test]
fn bounds_widen_with_the_horizon_and_enclose_the_middle() {
    let forecast = forecast_arrivals(&history(&[1_000, 1_500, 2_100, 2_600, 3_400], 30), 0.0, 720.0).unwrap();
    let mut before = 0.0;
    for days in [30.0, 90.0, 360.0, 720.0] {
        let [low, central, high] =
            [&forecast.low, &forecast.central, &forecast.high].map(|plan| plan.arrivals_between(0.0, days));
        assert!(0.0 < low && low < central && central < high);
        let width = (high / low).ln();
        assert!(width > before, "{days}");
        before = width;
    }
    // Arrivals up to a segment's end are those of the outlook.
    let outlook = RateHistory::new(&arrival_periods(&history(&[1_000, 1_500, 2_100, 2_600, 3_400], 30), 0.0)).unwrap();
    let ahead = outlook.mean_over(720.0);
    assert!(relative_error(forecast.central.arrivals_between(0.0, 720.0), 720.0 * ahead.rate) < 1e-9);
    let high = 720.0 * ahead.rate * ahead.log_deviation.exp();
    assert!(relative_error(forecast.high.arrivals_between(0.0, 720.0), high) < 1e-9);
}

#[test]
fn extremes_stay_sane() {
    let histories: [&[f64]; 6] = [
        &[0.0],
        &[0.0, 0.0, 0.0],
        &[1e4, 1e4, 1e4, 0.0, 0.0],
        &[0.0, 0.0, 5.0],
        &[100.0, 600.0, 3_600.0],
        &[1e-9, 1e18, 3.0],
    ];
    for events in histories {
        let periods: Vec<RatePeriod> = events.iter().map(|&n| month(n)).collect();
        let rates = RateHistory::new(&periods).unwrap();
        for days in [0.0, 1.0, 30.0, 3_650.0, 1e7, f64::INFINITY] {
            let outlook = rates.mean_over(days);
            assert!(outlook.rate.is_finite() && outlook.rate >= 0.0, "{events:?} {days}");
            assert!(outlook.log_deviation > 0.0 && outlook.log_deviation <= 1.5 + 1e-9, "{events:?} {days}");
        }
    }
    // What stopped stays stopped, nearly; what grew sixfold twice grows at most threefold more.
    let stopped: Vec<RatePeriod> = [1e4, 1e4, 1e4, 0.0, 0.0].map(month).to_vec();
    assert!(rate_over(&stopped, 90.0) < 1.0);
    let soaring: Vec<RatePeriod> = [100.0, 600.0, 3_600.0].map(month).to_vec();
    let soon = rate_over(&soaring, 90.0) / 120.0;
    assert!(soon > 0.8 && soon <= 3.0, "{soon}");
    let plans = forecast_arrivals(&history(&[1, 2], 1), 0.0, f64::INFINITY).unwrap();
    assert!(plans.high.rate(1e6).is_finite());
    for horizon in [0.0, -5.0, f64::NAN] {
        assert!(forecast_arrivals(&history(&[1_000, 1_300], 30), 0.0, horizon).is_some());
    }
    assert_eq!(RateHistory::new(&[RatePeriod { days: 30.0, events: 0.0, exposure: 0.0 }]), None);
}

#[test]
fn intervals_cover_simulated_random_walks() {
    let mut rng = StdRng::seed_from_u64(5);
    let (mut inside, mut cases) = ([0.0; 2], 0.0);
    for _ in 0..400 {
        let step = Normal::new(0.0, [0.05, 0.1, 0.2, 0.35][rng.random_range(0..4)]).unwrap();
        let mut level = rng.random_range(4.0..8.0f64);
        let periods: Vec<RatePeriod> = (0..12)
            .map(|_| {
                level += step.sample(&mut rng);
                month(Poisson::new(level.exp()).unwrap().sample(&mut rng))
            })
            .collect();
        let outlook = RateHistory::new(&periods[..9]).unwrap().mean_over(90.0);
        let came: f64 = periods[9..].iter().map(|p| p.events).sum();
        let spread = (outlook.log_deviation.powi(2) + 1.0 / (90.0 * outlook.rate)).sqrt();
        let miss = (came / (90.0 * outlook.rate)).ln().abs() / spread;
        // Normal quantiles of 0.75 and 0.95.
        inside[0] += f64::from(miss < 0.674_49);
        inside[1] += f64::from(miss < 1.644_85);
        cases += 1.0;
    }
    let [half, most] = inside.map(|n| n / cases);
    assert!((0.45..0.75).contains(&half) && (0.88..0.99).contains(&most), "{half} {most}");
}

#[test]
fn links_per_arrival_of_a_real_network_keep_falling() {
    // The answers network: 4.9 down to 3.5 links each; 3.5 in the newest period.
    let evidence = evidence(DegreeKind::Received, &snapshots("answers"));
    let periods = link_periods(&evidence, &forces(0.5, 1.0));
    let newest = periods[8].events / periods[8].exposure;
    assert!(relative_error(newest, (88_711.0 - 81_148.0) / (21_594.0 - 19_435.0)) < 1e-12);
    let ahead = forecast_links_per_arrival(&evidence, &forces(0.5, 1.0), 600.0).unwrap();
    assert!(ahead.rate < newest && ahead.rate > 0.6 * newest, "{ahead:?}");
    assert!(ahead.log_deviation > 0.02 && ahead.log_deviation < 0.4, "{ahead:?}");
}

//! Whole forecasts: on real networks, and against the simulator.

use tailcast::evaluate::{OriginAnswer, OriginError, OriginRequest, answer};
use tailcast::fit::{FitRequest, Rung};
use tailcast::growth::Simulation;
use tailcast::model::{ArrivalPlan, DegreeKind, Evidence, ForecastPlan, Levels, Snapshot, Thresholds, days_between};

use crate::networks::{counts, evidence, forces, snapshots};

fn request(evidence: Evidence, arrivals: Option<f64>, thresholds: &[u64], date: jiff::Timestamp) -> OriginRequest {
    let thresholds = Thresholds::new(thresholds).unwrap();
    let plan = ForecastPlan::new(evidence.latest().as_of, thresholds, &[date], Levels::default()).unwrap();
    let arrivals = arrivals.map(|per_day| ArrivalPlan::constant(per_day).unwrap());
    OriginRequest { evidence, fit: FitRequest::default(), arrivals, plan, questions: Default::default() }
}

fn forecast(request: &OriginRequest) -> OriginAnswer {
    answer(request, &|| false).unwrap()
}

/// One period ahead on the answers network (Stanford collection, Paranjape, Benson & Leskovec 2017), given the true
/// arrivals and landed links: the mean error beats the best plain trend of the tail sizes.
#[test]
fn two_snapshots_forecast_a_real_network_better_than_its_trend() {
    let all = snapshots("answers");
    let (mut ours, mut trend, mut inside, mut cases) = (0.0, 0.0, 0, 0);
    for window in all.windows(3) {
        let [before, now, then] = window else { unreachable!() };
        let (nodes, ends) =
            (then.counts.nodes() - now.counts.nodes(), then.counts.link_ends() - now.counts.link_ends());
        let per_day = nodes as f64 / days_between(now.as_of, then.as_of);
        let pair = evidence(DegreeKind::Received, &[before.clone(), now.clone()]);
        let mut request = request(pair, Some(per_day), &[5, 10, 20, 50, 100, 200], then.as_of);
        request.fit.links_per_arrival = Some(ends as f64 / nodes as f64);
        let landed_before = (now.counts.link_ends() - before.counts.link_ends()) as f64;
        for tail in &forecast(&request).forecast[0].tail {
            let size = |s: &Snapshot| s.counts.tail_size(tail.threshold) as f64;
            if size(then) < 5.0 {
                continue;
            }
            let straight = size(now) + (size(now) - size(before)) * ends as f64 / landed_before;
            ours += (tail.size.expected / size(then)).ln().abs();
            trend += (straight / size(then)).ln().abs();
            let ninety = tail.size.intervals[1];
            inside += usize::from(ninety.low <= size(then) && size(then) <= ninety.high);
            cases += 1;
        }
    }
    let (ours, trend) = (ours / cases as f64, trend / cases as f64);
    println!("mean |ln error| {ours:.4}, trend {trend:.4}; {inside} of {cases} inside the 90 % interval");
    assert!(ours < 0.04 && ours < 0.75 * trend);
    assert!(inside * 10 >= cases * 8);
}

#[test]
fn a_known_network_comes_true_within_its_intervals() {
    let truth = forces(0.8, 3.0).with_arrivals(ArrivalPlan::constant(50.0).unwrap());
    let as_of: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    let date: jiff::Timestamp = "2026-12-01T00:00:00Z".parse().unwrap();
    let thresholds = [5, 10, 30, 100, 300];
    let (mut inside, mut cases) = (0, 0);
    for seed in 0..20 {
        let mut network = Simulation::new(&counts(&[(0, 5), (1, 5)]), truth.clone(), seed).unwrap();
        network.arrive_many(20_000).unwrap();
        let snapshot = Snapshot { as_of, counts: network.degree_counts().unwrap() };
        let request = request(evidence(DegreeKind::Received, &[snapshot]), Some(50.0), &thresholds, date);
        let answer = forecast(&request);
        assert_eq!(answer.fit.rung, Rung::OneSnapshot);
        network.run_until(days_between(as_of, date)).unwrap();
        let came = network.degree_counts().unwrap();
        for tail in &answer.forecast[0].tail {
            let (ninety, size) = (tail.size.intervals[1], came.tail_size(tail.threshold) as f64);
            inside += usize::from(ninety.low <= size && size <= ninety.high);
            cases += 1;
        }
    }
    // The allowance for model error makes the interval wide for a network that follows the model exactly.
    assert!(inside * 100 >= cases * 93, "{inside} of {cases}");
}

#[test]
fn one_snapshot_needs_arrivals() {
    let snapshot = snapshots("debian").remove(0);
    let date = "2027-01-01T00:00:00Z".parse().unwrap();
    let request = request(evidence(DegreeKind::Received, &[snapshot]), None, &[10], date);
    assert_eq!(answer(&request, &|| false).unwrap_err(), OriginError::ArrivalsRequired);
}

#[test]
fn no_arrivals_mean_no_change() {
    let snapshot = snapshots("debian").remove(2);
    let date = "2027-01-01T00:00:00Z".parse().unwrap();
    let request =
        request(evidence(DegreeKind::Received, std::slice::from_ref(&snapshot)), Some(0.0), &[10, 1_000], date);
    let at = &forecast(&request).forecast[0];
    assert_eq!(at.nodes.expected, snapshot.counts.nodes() as f64);
    for tail in &at.tail {
        let now = snapshot.counts.tail_size(tail.threshold) as f64;
        assert_eq!([tail.size.expected, tail.size.median, tail.size.intervals[1].high], [now; 3]);
    }
    assert_eq!(at.largest_degree.median, snapshot.counts.largest() as f64);
}

#[test]
fn intervals_nest_and_widen_with_the_horizon() {
    let snapshot = snapshots("debian").remove(2);
    let near = request(
        evidence(DegreeKind::Received, &[snapshot]),
        Some(8.0),
        &[10, 100, 1_000],
        "2026-06-01T00:00:00Z".parse().unwrap(),
    );
    let mut far = near.clone();
    far.plan = ForecastPlan::new(
        near.evidence.latest().as_of,
        Thresholds::new(&[10, 100, 1_000]).unwrap(),
        &["2030-06-01T00:00:00Z".parse().unwrap()],
        Levels::default(),
    )
    .unwrap();
    for (near, far) in forecast(&near).forecast[0].tail.iter().zip(&forecast(&far).forecast[0].tail) {
        for tail in [near, far] {
            let [half, ninety] = tail.size.intervals[..] else { panic!() };
            assert!(ninety.low <= half.low && half.low <= tail.size.median);
            assert!(tail.size.median <= half.high && half.high <= ninety.high);
        }
        let width = |tail: &tailcast::forecast::TailForecast| tail.size.intervals[1].high - tail.size.intervals[1].low;
        assert!(width(far) >= width(near));
    }
}

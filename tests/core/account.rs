//! Issued forecasts against later snapshots.

use jiff::Timestamp;
use tailcast::evaluate::{
    DRIFT_TEST_LEVEL, DriftCause, FitRecord, IssuedAccount, Outcome, OutcomeSummary, account, drift_test,
};
use tailcast::forecast::{CountForecast, DateForecast, DegreeForecast, TailForecast};
use tailcast::model::{DegreeCounts, Estimate, Interval, Snapshot};

fn day(day: i64) -> Timestamp {
    Timestamp::from_second(day * 86_400).unwrap()
}

/// A forecast of `now` nodes that grow by `growth` at a date, as many of which as the threshold leaves; ± `spread`.
fn count(now: f64, middle: f64, spread: f64) -> CountForecast {
    let interval = |level, by: f64| Interval { level, low: middle - by * spread, high: middle + by * spread };
    CountForecast { now, expected: middle, median: middle, intervals: vec![interval(0.5, 0.5), interval(0.9, 1.0)] }
}

fn at(date: i64, middle: f64) -> DateForecast {
    let tail = |threshold, share: f64| TailForecast { threshold, size: count(100.0 * share, middle * share, 20.0) };
    DateForecast {
        date: day(date),
        nodes: count(100.0, middle, 40.0),
        links: count(200.0, 2.0 * middle, 60.0),
        largest_degree: DegreeForecast { now: 9.0, median: 9.0, intervals: Vec::new() },
        tail: vec![tail(1, 0.5), tail(3, 0.1)],
    }
}

fn forecast() -> Vec<DateForecast> {
    vec![at(10, 200.0), at(20, 400.0)]
}

/// A snapshot with so many nodes, half with at least one link, a tenth with at least three.
fn snapshot(date: i64, nodes: u64) -> Snapshot {
    let rows = [(0, nodes / 2), (1, nodes / 2 - nodes / 10), (3, nodes / 10)];
    Snapshot { as_of: day(date), counts: DegreeCounts::from_pairs(&rows).unwrap() }
}

#[test]
fn a_date_that_was_forecast_is_taken_as_stated() {
    let found = account(day(0), &forecast(), &snapshot(10, 210)).unwrap();
    assert_eq!((found.days_ahead, found.nodes.observed, found.nodes.expected), (10.0, 210.0, 200.0));
    assert_eq!(found.nodes.intervals[1], Interval { level: 0.9, low: 160.0, high: 240.0 });
    assert_eq!((found.tail[0].0, found.tail[0].1.observed, found.tail[1].1.observed), (1, 105.0, 21.0));
    assert!((found.nodes.log_error() - (200.0f64 / 210.0).ln()).abs() < 1e-15);
}

#[test]
fn between_dates_what_was_stated_is_interpolated_from_the_origin_on() {
    // Half-way from the origin, where the counts are known, to the first date.
    let early = account(day(0), &forecast(), &snapshot(5, 150)).unwrap().nodes;
    assert_eq!((early.expected, early.median), (150.0, 150.0));
    assert_eq!(early.intervals[1], Interval { level: 0.9, low: 130.0, high: 170.0 });
    // A quarter of the way from the first date to the second; ends are rounded outwards.
    let later = account(day(0), &forecast(), &snapshot(13, 260)).unwrap();
    assert!((later.nodes.expected - 260.0).abs() < 1e-9);
    let row = &later.tail[1].1;
    assert!((row.expected - 26.0).abs() < 1e-9, "{row:?}");
    assert_eq!((row.intervals[0].low, row.intervals[0].high), (16.0, 36.0));
    assert_eq!(account(day(0), &forecast(), &snapshot(21, 400)), None, "beyond the last date");
    assert_eq!(account(day(0), &forecast(), &snapshot(0, 100)), None, "the origin itself");
    assert_eq!(account(day(0), &forecast(), &snapshot(-3, 100)), None);
}

/// Bracher, Ray, Gneiting & Reich 2021 (PLoS Comput. Biol. 17, e1008618), section 2.2: the score is twice the mean quantile
/// loss over the median and the interval ends, 2K + 1 levels.
#[test]
fn the_weighted_interval_score_is_the_mean_quantile_loss() {
    let intervals = vec![
        Interval { level: 0.5, low: 93.0, high: 108.0 },
        Interval { level: 0.8, low: 88.0, high: 117.0 },
        Interval { level: 0.9, low: 81.0, high: 126.0 },
    ];
    for observed in [60.0, 81.0, 90.0, 100.0, 110.0, 126.0, 200.0] {
        let outcome = Outcome { observed, expected: 101.0, median: 100.0, intervals: intervals.clone() };
        let quantiles =
            intervals.iter().flat_map(|i| [((1.0 - i.level) / 2.0, i.low), ((1.0 + i.level) / 2.0, i.high)]);
        let loss = |(level, quantile): (f64, f64)| {
            let below = if observed < quantile { 1.0 } else { 0.0 };
            2.0 * (below - level) * (quantile - observed)
        };
        let mean = quantiles.chain([(0.5, 100.0)]).map(loss).sum::<f64>() / 7.0;
        assert!((outcome.weighted_interval_score() - mean).abs() < 1e-9, "{observed}");
    }
}

#[test]
fn outcomes_are_summed_up() {
    let found = account(day(0), &forecast(), &snapshot(10, 300)).unwrap();
    let outcomes: Vec<Outcome> = found.tail.into_iter().map(|(_, outcome)| outcome).collect();
    let summary = OutcomeSummary::of(&outcomes).unwrap();
    // 150 where 100 ± 20 was stated, 30 where 20 ± 20 was.
    assert_eq!(summary.outcomes, 2);
    assert!((summary.mean_log_error - (2.0f64 / 3.0).ln()).abs() < 1e-12);
    let shares: Vec<_> = summary.coverage.iter().map(|(level, covered)| (*level, covered.inside)).collect();
    assert_eq!(shares, [(0.5, 1), (0.9, 1)]);
    assert_eq!(OutcomeSummary::of([]), None);
}

fn estimate(value: f64) -> Estimate {
    Estimate { value, interval: Some(Interval { level: 0.9, low: value - 0.05, high: value + 0.05 }) }
}

fn fit(share: f64, links: f64) -> FitRecord {
    FitRecord { preferential_share: estimate(share), links_per_arrival: estimate(links) }
}

/// Forecasts made every ten days, each held against the snapshots ten and twenty days later with the nodes `came` says.
fn issued(came: &[u64], fit: FitRecord) -> Vec<IssuedAccount> {
    let mut accounts = Vec::new();
    for origin in 0..came.len() as i64 {
        for ahead in [1, 2] {
            let date = 10 * (origin + ahead);
            let Some(&nodes) = came.get((origin + ahead - 1) as usize) else { continue };
            let forecast = vec![at(10 * (origin + 1), 200.0), at(10 * (origin + 2), 200.0)];
            let account = account(day(10 * origin), &forecast, &snapshot(date, nodes)).unwrap();
            accounts.push(IssuedAccount { origin: day(10 * origin), fit, account });
        }
    }
    accounts.reverse();
    accounts
}

#[test]
fn a_run_of_misses_is_drift_and_a_single_one_is_chance() {
    assert_eq!(drift_test(&[], None), None);
    let calm = drift_test(&issued(&[200, 210, 190, 400, 200, 200], fit(0.5, 3.0)), None).unwrap();
    // One date of six, though two forecasts missed it: 1 − 0.9⁶.
    assert_eq!((calm.dates, calm.missed, calm.warns()), (6, 1, false));
    assert!((calm.p_value - (1.0 - 0.9f64.powi(6))).abs() < 1e-9);
    let drift = drift_test(&issued(&[200, 200, 200, 400, 400, 400], fit(0.5, 3.0)), None).unwrap();
    assert_eq!((drift.missed, drift.warns()), (3, true));
    assert!(drift.p_value < DRIFT_TEST_LEVEL);
    // Nodes left their interval, 160 to 240.
    assert_eq!(drift.causes, [DriftCause::Arrivals]);
    // Only the newest twelve dates count.
    let long = drift_test(&issued(&[&[400; 3][..], &[200; 12][..]].concat(), fit(0.5, 3.0)), None).unwrap();
    assert_eq!((long.dates, long.missed), (12, 0));
}

#[test]
fn the_cause_of_drift_is_what_moved() {
    // Tails that left their intervals while nodes and link ends stayed.
    let with_tail = |nodes: u64, hubs: u64, links: u64| {
        let rows = [(0, nodes - hubs), (3, hubs - 1), (links - 3 * (hubs - 1), 1)];
        DegreeCounts::from_pairs(&rows).unwrap()
    };
    let accounts = |counts: DegreeCounts| -> Vec<IssuedAccount> {
        (0..4)
            .rev()
            .map(|origin| {
                let forecast = vec![at(10 * (origin + 1), 200.0)];
                let snapshot = Snapshot { as_of: day(10 * (origin + 1)), counts: counts.clone() };
                let account = account(day(10 * origin), &forecast, &snapshot).unwrap();
                IssuedAccount { origin: day(10 * origin), fit: fit(0.5, 3.0), account }
            })
            .collect()
    };
    let more_hubs = accounts(with_tail(200, 60, 400));
    let causes = |accounts: &[IssuedAccount], newest: &FitRecord| drift_test(accounts, Some(newest)).unwrap().causes;
    assert_eq!(causes(&more_hubs, &fit(0.5, 3.0)), [DriftCause::Shape]);
    assert_eq!(causes(&more_hubs, &fit(0.7, 3.0)), [DriftCause::PreferentialShare]);
    assert_eq!(causes(&more_hubs, &fit(0.55, 4.0)), [DriftCause::LinksPerArrival]);
    // Link ends at 700, where 340 to 460 were forecast.
    assert_eq!(causes(&accounts(with_tail(200, 60, 700)), &fit(0.5, 3.0)), [DriftCause::LinksPerArrival]);
}

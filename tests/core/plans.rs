//! Arrival plans by the calendar: seasons, campaigns, uncertain rates; against sums day by day and the simulator.

use jiff::{Timestamp, tz::TimeZone};
use tailcast::evaluate::{OriginAnswer, OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::growth::{Course, NetworkLaw, Simulation};
use tailcast::model::{
    ArrivalPlan, ArrivalSpread, Campaign, DegreeKind, ForecastPlan, Levels, Seasons, StandingArrivals, StandingSegment,
    Thresholds, days_between,
};
use tailcast::numerics::tolerances::Accuracy;

use crate::networks::{evidence, forces, snapshots, young_network};

const MONTHS: [f64; 12] = [1.0, 0.5, 1.0, 1.25, 1.0, 1.0, 0.75, 0.75, 1.0, 1.0, 1.5, 2.0];

fn at(date: &str) -> Timestamp {
    format!("{date}T00:00:00Z").parse().unwrap()
}

fn rate(per_day: f64, growth_per_year: f64) -> Vec<StandingSegment> {
    vec![StandingSegment { from: None, per_day, growth_per_year }]
}

fn campaign(from: &str, until: &str, factor: f64) -> Campaign {
    Campaign { from: at(from), until: at(until), factor }
}

fn plan(segments: Vec<StandingSegment>, seasons: Seasons, latest: &str, until: &str) -> ArrivalPlan {
    StandingArrivals::new(segments).unwrap().with_seasons(seasons).at(at(latest), at(until)).unwrap()
}

/// The middle of every hour from one date to another, with its day counted from the first.
fn hours(from: &str, to: &str) -> Vec<(f64, Timestamp)> {
    let (start, end) = (at(from).as_second(), at(to).as_second());
    let middles = (start..end).step_by(3_600).map(|second| Timestamp::from_second(second + 1_800).unwrap());
    middles.map(|time| (days_between(at(from), time), time)).collect()
}

#[test]
fn months_and_campaigns_add_up_to_what_each_day_brings() {
    let campaigns = vec![campaign("2026-11-20", "2026-12-10", 2.5), campaign("2027-01-05", "2027-01-08", 0.0)];
    let seasons = Seasons::new(Some(MONTHS), Vec::new(), campaigns.clone()).unwrap();
    let (from, to) = ("2026-10-12", "2027-05-03");
    let plan = plan(rate(42.0, 0.2), seasons, from, to);
    // Growth goes on through the seasons: 20 % more after a year of 365.2425 days, whatever the factors were.
    let day_by_day: f64 = hours(from, to)
        .iter()
        .map(|&(day, time)| {
            let month = time.to_zoned(TimeZone::UTC).month();
            let held: f64 = campaigns.iter().filter(|c| c.from <= time && time < c.until).map(|c| c.factor).product();
            42.0 * 1.2f64.powf(day / 365.2425) * MONTHS[month as usize - 1] * held / 24.0
        })
        .sum();
    let days = days_between(at(from), at(to));
    let whole = plan.arrivals_between(0.0, days);
    // The middle of an hour stands for the hour up to its curvature: (γ/24)²/24, 10⁻¹¹.
    assert!((whole / day_by_day - 1.0).abs() < 1e-9, "{whole} and {day_by_day}");
    let parts: f64 = (0..203).map(|day| plan.arrivals_between(f64::from(day), f64::from(day + 1))).sum();
    assert!((parts / whole - 1.0).abs() < 1e-12);
    let year = StandingArrivals::new(rate(42.0, 0.2)).unwrap();
    let year = year.with_seasons(Seasons::new(Some(MONTHS), Vec::new(), Vec::new()).unwrap());
    let year = year.at(at("2026-01-01"), at("2027-06-01")).unwrap();
    assert!((year.rate(365.2425) / (42.0 * 1.2) - 1.0).abs() < 1e-12);
}

/// ISO 8601: a year has a week 53 where it begins or ends on a Thursday, as 2026 does and 2027 does not.
#[test]
fn weeks_go_by_iso_8601_across_the_turn_of_the_year() {
    let seasons = Seasons::new(None, vec![(53, 3.0), (1, 2.0)], Vec::new()).unwrap();
    let plan = plan(rate(10.0, 0.0), seasons, "2026-12-20", "2028-02-01");
    let on = |date: &str| plan.rate(days_between(at("2026-12-20"), at(date)));
    for (date, expected) in [
        ("2026-12-27", 10.0),
        ("2026-12-28", 30.0),
        ("2027-01-03", 30.0),
        ("2027-01-04", 20.0),
        ("2027-01-10", 20.0),
        ("2027-01-11", 10.0),
        ("2027-12-31", 10.0),
        ("2028-01-02", 10.0),
        ("2028-01-03", 20.0),
        ("2028-01-10", 10.0),
    ] {
        assert_eq!(on(date), expected, "{date}");
    }
    // Week 1 of 2025 begins in 2024.
    let seasons = Seasons::new(None, vec![(1, 2.0)], Vec::new()).unwrap();
    assert_eq!([seasons.factor(at("2024-12-29")), seasons.factor(at("2024-12-30"))], [1.0, 2.0]);
}

#[test]
fn a_campaign_runs_on_over_the_border_of_a_segment() {
    let segment = |from: &str, per_day| StandingSegment { from: Some(at(from)), per_day, growth_per_year: 0.0 };
    let segments = vec![segment("2026-01-01", 10.0), segment("2026-02-01", 30.0), segment("2026-09-01", 5.0)];
    let seasons = Seasons::new(None, Vec::new(), vec![campaign("2026-01-20", "2026-02-10", 2.0)]).unwrap();
    let found = plan(segments.clone(), seasons.clone(), "2026-01-15", "2026-05-01");
    assert_eq!(found.arrivals_between(0.0, 5.0), 50.0);
    assert_eq!(found.arrivals_between(5.0, 17.0), 240.0);
    assert_eq!(found.arrivals_between(17.0, 26.0), 540.0);
    assert_eq!(found.arrivals_between(26.0, 28.0), 60.0);
    let days: Vec<f64> = found.segments().iter().map(|piece| piece.from_day).collect();
    assert_eq!(days, [0.0, 5.0, 17.0, 26.0, 229.0]);
    // In the midst of the campaign at the last date asked, the last piece goes on.
    let cut = plan(segments, seasons, "2026-01-15", "2026-02-05");
    assert_eq!([cut.rate(25.0), cut.rate(40.0)], [60.0, 60.0]);
    // Months that are all alike change nothing, not even the number of pieces.
    let even =
        plan(rate(10.0, 0.3), Seasons::new(Some([1.0; 12]), vec![], vec![]).unwrap(), "2026-01-15", "2030-01-01");
    let plain = StandingArrivals::new(rate(10.0, 0.3)).unwrap().at(at("2026-01-15"), at("2030-01-01")).unwrap();
    assert_eq!(even, plain);
}

#[test]
fn too_many_pieces_and_impossible_factors_are_refused_with_a_remedy() {
    let weeks: Vec<(u8, f64)> = (1..=52).map(|week| (week, if week % 2 == 0 { 1.5 } else { 0.5 })).collect();
    let arrivals = StandingArrivals::new(rate(10.0, 0.0)).unwrap();
    let arrivals = arrivals.with_seasons(Seasons::new(None, weeks, Vec::new()).unwrap());
    assert!(arrivals.at(at("2026-01-01"), at("2035-01-01")).unwrap().segments().len() > 450);
    let faults = arrivals.at(at("2026-01-01"), at("2040-01-01")).unwrap_err();
    assert_eq!((faults[0].field, faults[0].index), ("weeks", None));
    assert!(faults[0].detail.contains("500") && faults[0].detail.contains("nearer dates"), "{}", faults[0]);
    let mut months = [1.0; 12];
    months[3] = -1.0;
    let backwards = campaign("2026-02-01", "2026-02-01", 1_001.0);
    let faults = Seasons::new(Some(months), vec![(54, 1.0), (7, 1.0), (7, 2.0)], vec![backwards]).unwrap_err();
    let places: Vec<_> = faults.iter().map(|fault| (fault.list, fault.index, fault.field)).collect();
    let expected = [
        ("months", Some(3), ""),
        ("campaigns", Some(0), "factor"),
        ("weeks", Some(54), ""),
        ("weeks", Some(7), ""),
        ("campaigns", Some(0), "until"),
    ];
    assert_eq!(places, expected);
    let steep = StandingArrivals::new(rate(1e14, 0.0)).unwrap();
    let steep = steep.with_seasons(Seasons::new(Some([100.0; 12]), vec![], vec![]).unwrap());
    assert_eq!(steep.at(at("2026-01-01"), at("2026-02-01")).unwrap_err()[0].field, "per_day");
}

#[test]
fn the_ways_to_say_how_uncertain_a_rate_is_agree() {
    // Of a log-normal law with ln's deviation s the standard deviation over the mean is √(e^{s²} − 1) (Johnson, Kotz & Balakrishnan
    // 1994, chapter 14).
    let log_deviation = |spread: ArrivalSpread| spread.log_deviation(Some(40.0)).unwrap();
    for relative in [0.01, 0.25, 3.0] {
        let s = log_deviation(ArrivalSpread::Relative(relative));
        assert!((s.powi(2).exp_m1().sqrt() / relative - 1.0).abs() < 1e-12);
        let same = log_deviation(ArrivalSpread::StandardDeviation(40.0 * relative));
        assert!((s / same - 1.0).abs() < 1e-12);
        // 90 % of the normal law lie within 1.6449 deviations: handbook tables.
        let range = ArrivalSpread::Range(40.0 * (-1.6449 * s).exp(), 40.0 * (1.6449 * s).exp());
        assert!((log_deviation(range) / s - 1.0).abs() < 1e-4);
    }
    assert_eq!(log_deviation(ArrivalSpread::Range(40.0, 40.0)), 0.0);
    for (spread, per_day) in [
        (ArrivalSpread::Range(41.0, 50.0), Some(40.0)),
        (ArrivalSpread::Range(0.0, 50.0), Some(40.0)),
        (ArrivalSpread::Range(35.0, f64::INFINITY), Some(40.0)),
        (ArrivalSpread::Range(35.0, 50.0), None),
        (ArrivalSpread::StandardDeviation(1.0), Some(0.0)),
        (ArrivalSpread::StandardDeviation(-1.0), Some(40.0)),
        (ArrivalSpread::StandardDeviation(5.0), None),
        (ArrivalSpread::Relative(f64::NAN), None),
        (ArrivalSpread::Relative(1e300), None),
    ] {
        assert_eq!(spread.log_deviation(per_day).unwrap_err().field, spread.field(), "{spread:?}");
    }
    let plan = ArrivalPlan::constant(40.0).unwrap().with_log_deviation(0.5).unwrap();
    let (low, high) = plan.sides().unwrap();
    assert!((low.rate(3.0) * high.rate(3.0) / 1_600.0 - 1.0).abs() < 1e-12 && high.rate(3.0) > 60.0);
    assert_eq!(plan.scaled(2.0).log_deviation(), 0.5);
}

fn forecast(snapshots: usize, deviation: f64, links: Option<f64>) -> OriginAnswer {
    let all = self::snapshots("answers");
    let evidence = evidence(DegreeKind::Received, &all[..snapshots]);
    let latest = evidence.latest().as_of;
    let date = latest + jiff::SignedDuration::from_hours(24 * 60);
    let plan = ForecastPlan::new(latest, Thresholds::new(&[5, 20, 100]).unwrap(), &[date], Levels::default()).unwrap();
    let arrivals = ArrivalPlan::constant(20.0).unwrap().with_log_deviation(deviation).unwrap();
    let fit = FitRequest { links_per_arrival: links, ..FitRequest::default() };
    let request = OriginRequest { evidence, fit, arrivals: Some(arrivals), plan, questions: Default::default() };
    answer(&request, &|| false).unwrap()
}

/// One snapshot has a single forecast, three a pooled one; links per arrival are given or not.
#[test]
fn uncertain_rates_widen_the_intervals_and_leave_the_middle() {
    for (snapshots, links) in [(1, None), (3, None), (3, Some(3.0))] {
        let (exact, vague) = (forecast(snapshots, 0.0, links), forecast(snapshots, 0.4, links));
        assert_eq!(exact.pools.is_empty(), snapshots == 1);
        assert_eq!(vague.pools, exact.pools);
        let (exact, vague) = (&exact.forecast[0], &vague.forecast[0]);
        let mut rows = vec![(&exact.nodes, &vague.nodes), (&exact.links, &vague.links)];
        rows.extend(exact.tail.iter().zip(&vague.tail).map(|(exact, vague)| (&exact.size, &vague.size)));
        for (i, (exact, vague)) in rows.into_iter().enumerate() {
            assert_eq!(exact.expected, vague.expected);
            let width = |count: &tailcast::forecast::CountForecast| count.intervals[1].high - count.intervals[1].low;
            let (narrow, wide) = (width(exact), width(vague));
            assert!(wide > narrow, "row {i} of {snapshots} snapshots: {narrow} to {wide}");
        }
    }
}

/// A seasonal plan with a campaign and a pause, nodes that depart and links that land between arrivals, so that it matters when the
/// arrivals come: the law of growth against 2,000 simulated networks.
#[test]
fn a_seasonal_plan_grows_what_the_simulator_grows() {
    const RUNS: u64 = 2_000;
    let campaigns = vec![campaign("2026-11-10", "2026-11-25", 4.0), campaign("2026-12-05", "2026-12-20", 0.0)];
    let seasons = Seasons::new(Some(MONTHS), vec![(44, 3.0)], campaigns).unwrap();
    let arrivals = plan(rate(6.0, 0.5), seasons, "2026-10-20", "2027-01-10");
    let forces = forces(0.8, 2.0).with_arrivals(arrivals);
    let forces = forces.with_links_per_node_day(0.004).unwrap().with_losses(0.003, 0.0).unwrap();
    let start = young_network();
    // 20 November, within the campaign, and 10 January.
    let days = [31.0, 82.0];
    let thresholds = [5, 20];
    let mut sums = [[(0.0, 0.0); 2]; 2];
    for seed in 0..RUNS {
        let mut network = Simulation::new(&start, forces.clone(), seed).unwrap();
        for (day, sums) in days.iter().zip(&mut sums) {
            network.run_until(*day).unwrap();
            let counts = network.degree_counts().unwrap();
            for (&threshold, (sum, squares)) in thresholds.iter().zip(sums) {
                let size = counts.tail_size(threshold) as f64;
                *sum += size;
                *squares += size * size;
            }
        }
    }
    let course = Course::new(&start, forces, days[1]).unwrap();
    for (&day, sums) in days.iter().zip(&sums) {
        let law = NetworkLaw::at(&course, &start, day).unwrap();
        for (&threshold, (sum, squares)) in thresholds.iter().zip(sums) {
            let mean = sum / RUNS as f64;
            let variance = (squares - sum * mean) / (RUNS - 1) as f64;
            let expected = law.tail(threshold, Accuracy::Full).unwrap().mean;
            let z = (mean - expected) / (variance / RUNS as f64).sqrt();
            println!("day {day}, at least {threshold}: simulated {mean:.3}, expected {expected:.3}, z = {z:.2}");
            assert!(z.abs() < 4.0, "day {day}, threshold {threshold}: {mean} and {expected}, z = {z}");
        }
    }
}

//! What a forecast costs in terms, steps and allocations: a change that makes it dearer fails here, whatever the machine. Limits are the
//! figures read off when they were set, and a quarter more.

use tailcast::evaluate::{OriginAnswer, OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Snapshot, Thresholds,
};
use tailcast::numerics::work::{Work, WorkDone, counted};

/// 200,000 nodes grown at p = 0.8 with three links each, every count taken `times` times.
fn counts(times: u64) -> DegreeCounts {
    let forces = GrowthParameters::new(
        DegreeKind::Received,
        AttachmentMix::new(0.8).unwrap(),
        ArrivalPlan::constant(1.0).unwrap(),
        EntryDegrees::single(0),
        3.0,
    );
    let mut network = Simulation::new(&DegreeCounts::from_pairs(&[(0, 1)]).unwrap(), forces.unwrap(), 1).unwrap();
    network.arrive_many(200_000).unwrap();
    let pairs: Vec<(u64, u64)> = network.degree_counts().unwrap().iter().map(|(k, n)| (k, times * n)).collect();
    DegreeCounts::from_pairs(&pairs).unwrap()
}

/// Twelve months and five thresholds; with `links` per arrival from now on, or as it always was.
fn request(counts: DegreeCounts, links: Option<f64>) -> OriginRequest {
    let as_of: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    let dates: Vec<_> = (1..=12).map(|month| as_of + jiff::SignedDuration::from_hours(24 * 30 * month)).collect();
    let arrivals = ArrivalPlan::constant(counts.nodes() as f64 / 1_000.0).unwrap();
    OriginRequest {
        evidence: Evidence::new(DegreeKind::Received, vec![Snapshot { as_of, counts }], None).unwrap(),
        fit: FitRequest { links_per_arrival: links, ..FitRequest::default() },
        arrivals: Some(arrivals),
        plan: ForecastPlan::new(
            as_of,
            Thresholds::new(&[10, 100, 1_000, 5_000, 10_000]).unwrap(),
            &dates,
            Levels::default(),
        )
        .unwrap(),
        questions: Default::default(),
    }
}

fn work(request: &OriginRequest) -> (OriginAnswer, WorkDone) {
    counted(|| answer(request, &|| false).unwrap())
}

fn within(done: &WorkDone, most: &[(Work, u64)]) {
    for &(kind, most) in most {
        let count = done.of(kind);
        println!("{kind:?} {count} of {most}");
        assert!(count <= most, "{kind:?}: {count}, and {most} at most");
    }
}

#[test]
fn a_forecast_takes_no_more_terms_than_it_did() {
    let (_, done) = work(&request(counts(1), None));
    within(&done, &[(Work::BetaFunctions, 1_600), (Work::RecurrenceSteps, 6_800), (Work::LikelihoodTerms, 8_100)]);
    assert_eq!(done.of(Work::ContourPoints), 0, "u/v is constant");
}

#[test]
fn a_forecast_with_drifting_hazards_takes_no_more_points_than_it_did() {
    let (_, done) = work(&request(counts(1), Some(1.5)));
    within(&done, &[(Work::ContourPoints, 180_000)]);
}

#[test]
fn a_forecast_asks_for_memory_no_more_often_than_it_did() {
    const MOST_ALLOCATIONS: u64 = 3_200;
    const MOST_BYTES: u64 = 48_000;
    let request = request(counts(1), None);
    // The first forecast of a process makes tables that last.
    answer(&request, &|| false).unwrap();
    let used = allocation_counter::measure(|| drop(answer(&request, &|| false).unwrap()));
    println!("{} allocations, {} bytes at once", used.count_total, used.bytes_max);
    assert!(used.count_total <= MOST_ALLOCATIONS && used.bytes_max <= MOST_BYTES, "{used:?}");
    assert_eq!(used.count_current, 0, "all is given back");
}

#[test]
fn a_thousand_times_the_nodes_take_about_the_same_work() {
    let (_, small) = work(&request(counts(1), None));
    let (_, large) = work(&request(counts(1_000), None));
    for kind in [Work::BetaFunctions, Work::RecurrenceSteps, Work::LikelihoodTerms] {
        let (small, large) = (small.of(kind) as f64, large.of(kind) as f64);
        assert!(large < 1.25 * small, "{kind:?}: {small} and {large}");
    }
}

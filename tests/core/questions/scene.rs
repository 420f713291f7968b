//! A small network whose forces are known, asked and simulated.

use jiff::{SignedDuration, Timestamp};
use tailcast::evaluate::{Answers, OriginRequest, answers_by};
use tailcast::fit::FitRequest;
use tailcast::forecast::Scenario;
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, ForecastPlan, GrowthParameters,
    Levels, Questions, Snapshot, Thresholds,
};

pub const AS_OF: &str = "2026-01-01T00:00:00Z";

pub fn after(days: f64) -> Timestamp {
    AS_OF.parse::<Timestamp>().unwrap() + SignedDuration::from_secs_f64(days * 86_400.0)
}

/// Forces of a network that grows by 10 nodes a day with 3 links each.
pub fn forces(share: f64) -> GrowthParameters {
    let mix = AttachmentMix::new(share).unwrap();
    let arrivals = ArrivalPlan::constant(10.0).unwrap();
    GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap()
}

/// The network that such forces have grown to 3,000 nodes.
pub fn grown(forces: &GrowthParameters) -> DegreeCounts {
    let start = DegreeCounts::from_pairs(&[(0, 10), (1, 10)]).unwrap();
    let mut network = Simulation::new(&start, forces.clone(), 11).unwrap();
    network.arrive_many(2_980).unwrap();
    network.degree_counts().unwrap()
}

/// What is answered when the forces are known and nothing else is uncertain.
pub fn ask(
    counts: &DegreeCounts,
    forces: &GrowthParameters,
    thresholds: &[u64],
    days: &[f64],
    questions: Questions,
) -> Answers {
    let dates: Vec<Timestamp> = days.iter().map(|&day| after(day)).collect();
    let as_of = after(0.0);
    let snapshot = Snapshot { as_of, counts: counts.clone() };
    let thresholds = Thresholds::new(thresholds).unwrap();
    let request = OriginRequest {
        evidence: Evidence::new(DegreeKind::Received, vec![snapshot], None).unwrap(),
        fit: FitRequest::default(),
        arrivals: Some(forces.arrivals.clone()),
        plan: ForecastPlan::new(as_of, thresholds, &dates, Levels::default()).unwrap(),
        questions,
    };
    let scenario =
        Scenario { forces: forces.clone(), excursions: Vec::new(), alternatives: Vec::new(), model_error: 0.0 };
    answers_by(&request, scenario, &|| false).unwrap()
}

/// Runs the simulator `runs` times from `counts`; `look` sees each run at every one of `days`.
pub fn simulate(
    counts: &DegreeCounts,
    forces: &GrowthParameters,
    runs: u64,
    days: &[f64],
    mut look: impl FnMut(u64, usize, &Simulation),
) {
    for run in 0..runs {
        let mut network = Simulation::new(counts, forces.clone(), 1_000 + run).unwrap();
        for (i, &day) in days.iter().enumerate() {
            network.run_until(day).unwrap();
            look(run, i, &network);
        }
    }
}

/// Whether a share of `runs` runs is what a probability says, within four standard errors and half a run.
#[track_caller]
pub fn assert_share(seen: u64, runs: u64, expected: f64, what: &str) {
    let share = seen as f64 / runs as f64;
    let slack = 4.0 * (expected * (1.0 - expected) / runs as f64).sqrt() + 0.5 / runs as f64;
    assert!(
        (share - expected).abs() <= slack,
        "{what}: {share:.4} of {runs} runs, expected {expected:.4} ± {slack:.4}"
    );
}

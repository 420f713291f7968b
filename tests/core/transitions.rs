//! Fits of transitions and link events: graphs grown by igraph, real networks, simulated forces.

use std::collections::BTreeMap;

use tailcast::census::Census;
use tailcast::fit::{Fit, FitError, FitRequest, Fixed, Model, ModelChoice, Rung};
use tailcast::growth::Simulation;
use tailcast::model::{DegreeKind, Evidence, Move, Snapshot, Transitions};

use crate::networks::{counts, forces, transitions};
use crate::reference::{number, rows};

fn from_moves(kind: DegreeKind, moves: &[Move]) -> Evidence {
    let date = |text: &str| format!("{text}T00:00:00Z").parse().unwrap();
    let table = Transitions::new(date("2026-01-01"), date("2026-04-11"), moves).unwrap();
    let last = Snapshot { as_of: table.to(), counts: table.counts_after().unwrap() };
    Evidence::new(kind, vec![last], None).unwrap().with_transitions(vec![table]).unwrap()
}

fn asked(rung: Rung, model: Model) -> FitRequest {
    FitRequest { rung: Some(rung), choice: ModelChoice::Only(model), ..FitRequest::default() }
}

/// Distance of the truth from an estimate in standard deviations.
fn off(fit: &Fit, truth: f64) -> f64 {
    (fit.preferential_share.value - truth) / (0.5 * (fit.share_excursion.1 - fit.share_excursion.0))
}

/// Degrees at 40,000 and at 50,000 nodes of graphs grown by igraph (tests/reference/graphs.py).
#[test]
fn transitions_of_independently_grown_graphs_give_their_mix_and_exponent() {
    let mut graphs: BTreeMap<[String; 4], Vec<Move>> = BTreeMap::new();
    for row in rows("grown_transitions.csv") {
        let degree = |text: &String| (!text.is_empty()).then(|| number(text) as u64);
        let step = Move { before: degree(&row[5]), after: degree(&row[6]), nodes: number(&row[7]) as u64 };
        graphs.entry([0, 1, 2, 3].map(|i| row[i].clone())).or_default().push(step);
    }
    assert_eq!(graphs.len(), 3);
    for ([kind, _, share, exponent], moves) in graphs {
        let kind = if kind == "received" { DegreeKind::Received } else { DegreeKind::Total };
        let evidence = from_moves(kind, &moves);
        let (share, exponent) = (number(&share), number(&exponent));
        let fit = fit(&evidence, &asked(Rung::Transitions, Model::Power));
        let gamma = fit.forces.kernel_exponent;
        let error = 0.5 * (gamma.excursion.1 - gamma.excursion.0);
        println!("{share} {exponent}: p {:?} γ {:?}", fit.preferential_share, gamma.estimate);
        assert!((gamma.value() - exponent).abs() < 3.0 * error && error < 0.05, "γ {exponent}: {gamma:?}");
        assert!(fit.forces.departures.value() == 0.0 && fit.forces.link_losses.value() == 0.0);
        if exponent == 1.0 {
            let mix = self::fit(&evidence, &asked(Rung::Transitions, Model::Mix));
            assert!(off(&mix, share).abs() < 3.0, "p {share}: {:?}", mix.preferential_share);
        }
    }
}

fn fit(evidence: &Evidence, request: &FitRequest) -> Fit {
    tailcast::fit::fit(evidence, request, &|| false).unwrap()
}

/// Debian's dependency network (examples/data/debian): what its transitions show by counting, and what the fit makes of it.
#[test]
fn debian_loses_packages_and_renames_hubs() {
    let tables = transitions("debian");
    let newest = Snapshot { as_of: tables[0].to(), counts: tables[0].counts_after().unwrap() };
    let evidence = Evidence::new(DegreeKind::Received, vec![newest], None).unwrap();
    let request = FitRequest { rung: Some(Rung::Transitions), ..FitRequest::default() };
    let fit = fit(&evidence.with_transitions(vec![tables[0].clone()]).unwrap(), &request);
    let summary = fit.transitions.as_ref().unwrap();
    let rates = summary.periods[0];
    assert!((rates.departure_share - 0.104).abs() < 5e-4, "{rates:?}");
    assert!(
        (0.02..0.06).contains(&rates.uniform_gain) && (0.04..0.05).contains(&rates.first_gain.unwrap()),
        "{rates:?}"
    );
    assert!(fit.preferential_share.value > 0.9 && fit.forces.departures.value() > 0.0, "{:?}", fit.preferential_share);
    // Hubs under a new name: 787 dependents gone, 838 new (examples/data/debian/hubs.csv has the names).
    assert!(summary.outliers.renamed.contains(&(787, 838)), "{:?}", summary.outliers.renamed);
    assert!(summary.outliers.jumps.contains(&(24, 1_114, 1)), "{:?}", summary.outliers.jumps);
    assert!(fit.verdict.contains("almost proportionally"), "{}", fit.verdict);
}

/// Nobody leaves the answers network and no link is lost: the fit must say so, and find newcomers' degrees.
#[test]
fn a_network_that_only_grows_is_seen_to() {
    let tables = transitions("answers");
    let newest = Snapshot { as_of: tables[8].to(), counts: tables[8].counts_after().unwrap() };
    let evidence = Evidence::new(DegreeKind::Received, vec![newest], None).unwrap();
    let evidence = evidence.with_transitions(tables[8..].to_vec()).unwrap();
    let fit = fit(&evidence, &FitRequest { rung: Some(Rung::Transitions), ..FitRequest::default() });
    assert!(fit.forces.departures.value() == 0.0 && fit.forces.link_losses.value() == 0.0);
    assert!(fit.forces.departures.estimate.interval.unwrap().high > 0.0);
    assert_eq!(fit.candidates.len(), 6);
    // Newcomers arrive with their first link on either end; those seen at the period's end have grown since.
    let (arrived, ends) = tables[8].newcomers().fold((0, 0), |(n, e), (degree, nodes)| (n + nodes, e + degree * nodes));
    let seen = ends as f64 / arrived as f64;
    assert!((0.4..seen).contains(&fit.entry.mean()), "{} of {seen}", fit.entry.mean());
}

/// Counts alone do not tell forces beyond the mix, and say so.
#[test]
fn a_rung_that_cannot_tell_a_force_says_what_would() {
    let snapshot = |date: &str, pairs: &[(u64, u64)]| Snapshot { as_of: date.parse().unwrap(), counts: counts(pairs) };
    let early = snapshot("2026-01-01T00:00:00Z", &[(0, 900), (1, 300), (5, 60), (20, 6)]);
    let late = snapshot("2026-02-01T00:00:00Z", &[(0, 1_000), (1, 380), (5, 80), (20, 9)]);
    let evidence = Evidence::new(DegreeKind::Received, vec![early, late], None).unwrap();
    for model in [Model::Power, Model::Dormancy, Model::GrowthVariance] {
        let request = FitRequest { choice: ModelChoice::Only(model), ..FitRequest::default() };
        match tailcast::fit::fit(&evidence, &request, &|| false) {
            Err(FitError::NotIdentified { detail }) => assert!(detail.contains("transitions"), "{detail}"),
            other => panic!("{other:?}"),
        }
    }
    let fixed = Fixed { dormant_share: Some(0.2), ..Fixed::default() };
    let given = fit(&evidence, &FitRequest { fixed, ..FitRequest::default() });
    assert_eq!((given.model, given.forces.dormant_share.value()), (Model::Dormancy, 0.2));
    for rung in [Rung::Transitions, Rung::LinkEvents] {
        let request = FitRequest { rung: Some(rung), ..FitRequest::default() };
        assert!(matches!(tailcast::fit::fit(&evidence, &request, &|| false), Err(FitError::NotIdentified { .. })));
    }
}

/// Every force at once that one candidate can have, from one simulated period; the full study is studies/force_coverage.
#[test]
fn simulated_forces_are_recovered() {
    let start = {
        let mut network = Simulation::new(&counts(&[(3, 200)]), forces(0.8, 3.0), 1).unwrap();
        network.arrive_many(30_000).unwrap();
        network.degree_counts().unwrap()
    };
    let arrivals = tailcast::model::ArrivalPlan::constant(60.0).unwrap();
    let truth = || forces(0.7, 3.0).with_arrivals(arrivals.clone()).with_losses(5e-4, 1e-3).unwrap();
    for (model, truth, own) in [
        (Model::Dormancy, truth().with_dormant_share(0.4).unwrap(), 0.4),
        (Model::GrowthVariance, truth().with_growth_variance(0.6).unwrap(), 0.6),
        (Model::Power, truth().with_kernel_exponent(0.8).unwrap(), 0.8),
    ] {
        let mut network = Simulation::new(&start, truth, 5).unwrap();
        network.run_until(100.0).unwrap();
        let fit = fit(&from_moves(DegreeKind::Received, &network.moves()), &asked(Rung::Transitions, model));
        let found = match model {
            Model::Dormancy => fit.forces.dormant_share,
            Model::GrowthVariance => fit.forces.growth_variance,
            _ => fit.forces.kernel_exponent,
        };
        let near = |force: tailcast::fit::Force, truth: f64| {
            (force.value() - truth).abs() < 1.8 * (force.excursion.1 - force.excursion.0)
        };
        assert!(near(found, own), "{model:?}: {found:?}");
        assert!(off(&fit, 0.7).abs() < 3.6, "{model:?}: {:?}", fit.preferential_share);
        assert!(near(fit.forces.departures, 5e-4) && near(fit.forces.link_losses, 1e-3), "{model:?}: {:?}", fit.forces);
        assert!(fit.transitions.unwrap().outliers.nodes < 30, "simulated nodes are no outliers");
    }
}

/// A list grown with p = 0.7, link by link: the exact likelihood, the exponent, and the curve against the line.
#[test]
fn link_events_give_mix_exponent_and_curve() {
    use rand::rngs::SmallRng;
    use rand::{RngExt, SeedableRng};
    let mut rng = SmallRng::seed_from_u64(11);
    let mut census = Census::new(DegreeKind::Received, None);
    let start: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    let mut ends: Vec<u32> = vec![1];
    census.record(start, 0, 1).unwrap();
    for source in 2..20_000_u32 {
        for link in 0..3 {
            let time = start + jiff::SignedDuration::from_secs(3 * i64::from(source) + link);
            let preferential = rng.random::<f64>() < 0.7;
            let target = if preferential { ends[rng.random_range(0..ends.len())] } else { rng.random_range(0..source) };
            census.record(time, source, target).unwrap();
            ends.push(target);
        }
    }
    let evidence = census.finish().unwrap().into_evidence().unwrap();
    let fit = fit(&evidence, &FitRequest { rung: Some(Rung::LinkEvents), ..FitRequest::default() });
    assert_eq!(fit.rung, Rung::LinkEvents);
    assert!(fit.candidates.iter().all(|c| matches!(c.model, Model::Mix | Model::Power) || c.weight < 1e-6));
    let attachment = fit.attachment.as_ref().unwrap();
    assert!(off(&fit, 0.7).abs() < 3.0, "{:?}", fit.preferential_share);
    assert!((attachment.kernel_exponent.value() - 1.0).abs() < 0.03 && attachment.linear_p_value > 0.01);
    let total: u64 = attachment.curve.iter().map(|point| point.landings).sum();
    assert_eq!(total, attachment.landings);
    let outside = attachment.curve.iter().filter(|point| {
        let interval = point.attraction.interval.unwrap();
        point.fitted < interval.low || point.fitted > interval.high
    });
    // Of about 20 ranges two are expected outside their 90 % intervals.
    assert!(outside.count() <= 6, "{:?}", attachment.curve);
}

/// A given parameter is held while the mix is fitted, not put in afterwards: at the truth the mix is the truth, far from it it moves.
#[test]
fn a_given_parameter_is_held_in_the_fit() {
    let mut network = Simulation::new(&counts(&[(3, 200)]), forces(0.8, 3.0), 1).unwrap();
    network.arrive_many(20_000).unwrap();
    let truth = forces(0.8, 3.0).with_arrivals(tailcast::model::ArrivalPlan::constant(40.0).unwrap());
    let truth = truth.with_kernel_exponent(0.7).unwrap();
    let mut network = Simulation::new(&network.degree_counts().unwrap(), truth, 2).unwrap();
    network.run_until(100.0).unwrap();
    let evidence = from_moves(DegreeKind::Received, &network.moves());
    let at = |exponent: f64| {
        let fixed = Fixed { kernel_exponent: Some(exponent), ..Fixed::default() };
        fit(&evidence, &FitRequest { fixed, ..asked(Rung::Transitions, Model::Power) })
    };
    assert!(off(&at(0.7), 0.8).abs() < 3.0, "{:?}", at(0.7).preferential_share);
    assert!(off(&at(1.2), 0.8).abs() > 5.0, "{:?}", at(1.2).preferential_share);
    assert_eq!(at(1.2).forces.kernel_exponent.value(), 1.2);
}

/// With a cadence a link list gives all rungs at once; each answers with its own candidates.
#[test]
fn each_rung_answers_with_its_own_candidates() {
    let mut census = Census::new(DegreeKind::Received, Some("P1D".parse().unwrap()));
    let start: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    census.record(start, 0, 1).unwrap();
    for source in 2..3_000_u32 {
        let time = start + jiff::SignedDuration::from_secs(120 * i64::from(source));
        // Half to the same few, half to anyone: no law of growth, but evidence of every kind.
        let target = if source % 2 == 0 { source * 7_919 % source.min(97) } else { source * 7_919 % source };
        census.record(time, source, target).unwrap();
    }
    let evidence = census.finish().unwrap().into_evidence().unwrap();
    assert!(evidence.snapshots().len() > 2 && !evidence.transitions().is_empty());
    let by = |rung| fit(&evidence, &FitRequest { rung: Some(rung), ..FitRequest::default() });
    let (flows, moves, events) = (by(Rung::SuccessiveSnapshots), by(Rung::Transitions), by(Rung::LinkEvents));
    assert_eq!(flows.candidates.len(), 3);
    assert_eq!(moves.candidates, moves.transitions.as_ref().unwrap().candidates);
    assert_eq!(events.candidates, events.attachment.as_ref().unwrap().candidates);
    assert!(events.candidates.iter().any(|candidate| candidate.model == events.model));
    for model in [Model::Dormancy, Model::GrowthVariance] {
        let refused = tailcast::fit::fit(&evidence, &asked(Rung::LinkEvents, model), &|| false);
        assert!(matches!(refused, Err(FitError::NotIdentified { .. })), "{refused:?}");
    }
}

/// A search asks whether to go on before each evaluation, so a long table does not keep a worker.
#[test]
fn a_fit_of_transitions_stops_when_told() {
    let tables = transitions("debian");
    let newest = Snapshot { as_of: tables[0].to(), counts: tables[0].counts_after().unwrap() };
    let evidence = Evidence::new(DegreeKind::Received, vec![newest], None).unwrap();
    let evidence = evidence.with_transitions(vec![tables[0].clone()]).unwrap();
    let asks = std::cell::Cell::new(0);
    let stopped = tailcast::fit::fit(&evidence, &FitRequest::default(), &|| {
        asks.set(asks.get() + 1);
        asks.get() > 5
    });
    assert!(matches!(stopped, Err(FitError::Cancelled)), "{stopped:?}");
    assert_eq!(asks.get(), 6);
}

/// Nodes that gain whatever no kernel gives them: half of those with four to seven links get five more, the rest of the network
/// grows by a mix. The fit says where it fails; of a plain mix it has nothing to say.
#[test]
fn a_misfit_of_transitions_is_told() {
    let mut network = Simulation::new(&counts(&[(3, 200)]), forces(0.8, 3.0), 1).unwrap();
    network.arrive_many(20_000).unwrap();
    let arrivals = tailcast::model::ArrivalPlan::constant(40.0).unwrap();
    let start = network.degree_counts().unwrap();
    let mut network = Simulation::new(&start, forces(0.8, 3.0).with_arrivals(arrivals), 2).unwrap();
    network.run_until(100.0).unwrap();
    let plain = network.moves();
    let mut moved: BTreeMap<(Option<u64>, Option<u64>), u64> = BTreeMap::new();
    for step in &plain {
        let pushed = if step.before.is_some_and(|k| (4..8).contains(&k)) { step.nodes / 2 } else { 0 };
        *moved.entry((step.before, step.after)).or_default() += step.nodes - pushed;
        *moved.entry((step.before, step.after.map(|k| k + 5))).or_default() += pushed;
    }
    let odd: Vec<Move> = moved.into_iter().map(|((before, after), nodes)| Move { before, after, nodes }).collect();
    let request = FitRequest { rung: Some(Rung::Transitions), ..FitRequest::default() };
    let told = |moves: &[Move]| {
        let fit = fit(&from_moves(DegreeKind::Received, moves), &request);
        fit.warnings.into_iter().find(|warning| warning.code == "transitions_misfit")
    };
    assert_eq!(told(&plain), None);
    let warning = told(&odd).expect("a warning");
    assert!(warning.detail.contains("4 to 7 links"), "{}", warning.detail);
}

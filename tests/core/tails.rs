//! Tail sizes: conservation, monotonicity, consistency over time, closed mean-field cases.

use std::cell::Cell;

use proptest::prelude::*;
use tailcast::growth::{Course, GrowthError, NetworkLaw, NodeLaw, TailSum};
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};
use tailcast::numerics::tolerances::Accuracy;

use crate::networks::{counts, forces, total_forces, young_network};
use crate::reference::relative_error;

fn size(course: &Course, counts: &DegreeCounts, day: f64, threshold: u64) -> TailSum {
    NetworkLaw::at(course, counts, day).unwrap().tail(threshold, Accuracy::Full).unwrap()
}

#[test]
fn tail_sizes_add_up_to_nodes_and_link_ends() {
    let start = young_network();
    for forces in [forces(0.0, 3.0), forces(0.6, 3.0), forces(0.95, 0.7), total_forces(0.5, 2)] {
        let course = Course::new(&start, forces, 1_500.0).unwrap();
        assert!(relative_error(size(&course, &start, 1_500.0, 0).mean, course.nodes(1_500.0)) < 1e-9);
        let mut ends = 0.0;
        for threshold in 1.. {
            let tail = size(&course, &start, 1_500.0, threshold).mean;
            ends += tail;
            if tail < 1e-9 {
                break;
            }
        }
        // Σ_{j≥1} S_j = Σ_k k·n_k.
        assert!(relative_error(ends, course.link_ends(1_500.0)) < 1e-8, "{ends} {}", course.link_ends(1_500.0));
    }
}

#[test]
fn going_to_a_date_directly_or_by_a_stop_is_the_same() {
    let start = young_network();
    let course = Course::new(&start, forces(0.7, 4.0), 2_000.0).unwrap();
    let (first, second) = (NodeLaw::between(&course, 0.0, 700.0), NodeLaw::between(&course, 700.0, 2_000.0));
    let direct = NodeLaw::between(&course, 0.0, 2_000.0);
    for (degree, threshold) in [(0, 3), (0, 12), (4, 9), (4, 40), (20, 30), (20, 90)] {
        let mut by_stop = 0.0;
        for at in degree..threshold {
            let stop = first.tail(degree, at).unwrap() - first.tail(degree, at + 1).unwrap();
            by_stop += stop * second.tail(at, threshold).unwrap();
        }
        by_stop += first.tail(degree, threshold).unwrap();
        assert!(relative_error(by_stop, direct.tail(degree, threshold).unwrap()) < 1e-8);
    }
}

/// Under uniform growth a node's expected degree rises by ℓ·ln(t/i), under preferential growth as a power of t/i
/// (Barabási & Albert 1999: m·(t/i)^½; common practice for the logarithm, no source).
#[test]
fn expected_degrees_follow_the_published_laws() {
    let start = counts(&[(4, 100)]);
    let uniform = Course::new(&start, forces(0.0, 3.0), 900.0).unwrap();
    let gained = NodeLaw::between(&uniform, 0.0, 900.0).mean(4) - 4.0;
    assert!(relative_error(gained, 3.0 * 10f64.ln()) < 1e-12);
    let preferential = Course::new(&start, total_forces(1.0, 2), 900.0).unwrap();
    assert!(relative_error(NodeLaw::between(&preferential, 0.0, 900.0).mean(4), 4.0 * 10f64.sqrt()) < 1e-12);
}

/// In a network grown uniformly from the start, the share of nodes with more than m links beyond their own falls as a
/// geometric law with ratio m/(m+1) (Krapivsky, Redner & Leyvraz 2000), here reached from one node by growth to 10⁷.
#[test]
fn growth_from_one_node_reaches_the_stationary_law() {
    let start = counts(&[(2, 1)]);
    for (share, law) in [(0.0, [1.0, 2.0 / 3.0, 4.0 / 9.0]), (1.0, [1.0, 0.5, 0.3])] {
        let course = Course::new(&start, total_forces(share, 2), 1e7).unwrap();
        for (extra, expected) in law.into_iter().enumerate() {
            let tail = size(&course, &start, 1e7, 2 + extra as u64).mean / course.nodes(1e7);
            assert!(relative_error(tail, expected) < 1e-5, "p={share} k={extra}: {tail} {expected}");
        }
    }
}

#[test]
fn cost_and_answers_do_not_depend_on_scale() {
    // The same network a million times over: every tail a million times as large.
    let small = young_network();
    let large = counts(&small.iter().map(|(k, n)| (k, n * 1_000_000)).collect::<Vec<_>>());
    let plan = ArrivalPlan::constant(1e6).unwrap();
    let course = Course::new(&small, forces(0.6, 3.0), 500.0).unwrap();
    let scaled = Course::new(&large, forces(0.6, 3.0).with_arrivals(plan), 500.0).unwrap();
    for threshold in [1, 10, 50, 200] {
        let ratio = size(&scaled, &large, 500.0, threshold).mean / size(&course, &small, 500.0, threshold).mean;
        assert!(relative_error(ratio, 1e6) < 1e-9);
    }
}

#[test]
fn nobody_starts_without_a_first_link() {
    let start = counts(&[(0, 10)]);
    assert_eq!(Course::new(&start, forces(1.0, 2.0), 10.0).unwrap_err(), GrowthError::NobodyStarts);
    assert!(Course::new(&start, forces(0.96, 2.0), 10.0).is_err());
    let course = Course::new(&start, forces(0.9, 2.0), 10.0).unwrap();
    assert!(relative_error(size(&course, &start, 10.0, 0).mean, 20.0) < 1e-12);
    assert!(size(&course, &start, 10.0, 1).mean > 1.0);
}

#[test]
fn losses_balance_gains() {
    // Uniform links per node and day against losses: each node's degree is Poisson with mean ι/w, whatever the start.
    let start = counts(&[(3, 1_000)]);
    let still = ArrivalPlan::constant(0.0).unwrap();
    let forces =
        GrowthParameters::new(DegreeKind::Received, AttachmentMix::UNIFORM, still, EntryDegrees::single(0), 0.0)
            .unwrap()
            .with_links_per_node_day(0.5)
            .unwrap()
            .with_losses(0.0, 0.1)
            .unwrap();
    let course = Course::new(&start, forces, 1_000.0).unwrap();
    assert!(relative_error(course.link_ends(1_000.0), 5_000.0) < 1e-9);
    let law = NodeLaw::between(&course, 0.0, 1_000.0);
    let poisson_none = (-5f64).exp();
    assert!(relative_error(law.tail(3, 1).unwrap(), 1.0 - poisson_none) < 1e-10);
    assert!(relative_error(law.variance(3), 5.0) < 1e-9);
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]
    #[test]
    fn tails_fall_with_the_threshold_and_rise_with_time_and_degree(
        share in 0.0..=1.0f64,
        links in 0.01..20.0f64,
        nodes in 1u64..1_000_000,
        degree in 1u64..1_000_000,
        days in 0.01..5_000.0f64,
    ) {
        let start = counts(&[(0, nodes), (degree, 1 + nodes / 100)]);
        let course = Course::new(&start, forces(share, links), days).unwrap();
        let law = NodeLaw::between(&course, 0.0, days);
        let sooner = NodeLaw::between(&course, 0.0, days / 2.0);
        let mut before = 1.0;
        for threshold in [1, 2, 5, degree, degree + 1, degree + 10, 2 * degree, 10 * degree] {
            let tail = law.tail(degree, threshold).unwrap();
            prop_assert!((0.0..=1.0).contains(&tail));
            if threshold > degree {
                prop_assert!(tail <= before * (1.0 + 1e-9));
                before = tail;
            }
            prop_assert!(sooner.tail(degree, threshold).unwrap() <= tail * (1.0 + 1e-8) + 1e-15);
            prop_assert!(law.tail(degree - 1, threshold).unwrap() <= tail * (1.0 + 1e-8) + 1e-15);
        }
    }
}

/// One inversion over a mixture of starting degrees is the weighted sum of one inversion each.
#[test]
fn a_mixture_of_starts_is_the_sum_of_its_parts() {
    let course = Course::new(&young_network(), forces(0.7, 4.0), 2_000.0).unwrap();
    let lossy = Course::new(&young_network(), forces(0.7, 4.0).with_losses(0.0, 1e-4).unwrap(), 2_000.0).unwrap();
    let starts = [(0, 0.4), (1, 0.3), (2, 0.1), (7, 0.1), (40, 0.07), (300, 0.03)];
    for course in [course, lossy] {
        let law = NodeLaw::between(&course, 0.0, 2_000.0);
        for threshold in [1, 3, 8, 41, 100, 299, 301, 900] {
            let parts: f64 = starts.iter().map(|&(k, share)| share * law.tail(k, threshold).unwrap()).sum();
            let whole = law.mixture_tail(&starts, threshold, Accuracy::Full).unwrap();
            assert!(relative_error(whole, parts) < 1e-9, "{threshold}: {whole:e} {parts:e}");
        }
    }
}

/// A newcomer without links under almost purely preferential attachment: nearly all of its law lies at 0, and the rest is nearly
/// Fisher's logarithmic series. Against the closed form (a negative binomial law of tiny shape, here summed term by term).
#[test]
fn rare_gains_are_as_exact_as_common_ones() {
    for (share, days) in [(0.99999, 1_000.0), (0.9999999, 1_000.0), (0.999, 20.0), (0.99999, 5.0)] {
        // K/N stays 3: the law is exactly negative binomial.
        let start = counts(&[(0, 500), (3, 400), (18, 100)]);
        let course = Course::new(&start, forces(share, 3.0), days).unwrap();
        let law = NodeLaw::between(&course, 0.0, days);
        let (shape, q) = ((1.0 - share) * 3.0 / share, (-share * (1.0 + days / 1e3_f64).ln()).exp());
        for accuracy in [Accuracy::Full, Accuracy::Working] {
            for threshold in [1_u64, 2, 3, 17, 60, 200] {
                let mut term = q.powf(shape);
                let mut exact = 0.0;
                for n in 0..4_000 {
                    exact += if n >= threshold { term } else { 0.0 };
                    term *= (shape + n as f64) * (1.0 - q) / (n as f64 + 1.0);
                }
                let ours = law.tail_within(0, threshold, accuracy).unwrap();
                let allowed = if accuracy == Accuracy::Full { 1e-8 } else { 2e-5 };
                assert!(
                    (ours - exact).abs() <= allowed * exact + 1e-290,
                    "p {share}, {days} days, {threshold}: {ours:e} {exact:e}"
                );
            }
        }
    }
}

/// What an extreme network costs is not known beforehand, so whoever waits for a tail must be able to stop it in the middle.
#[test]
fn a_tail_stops_between_two_of_its_node_laws_when_it_is_cancelled() {
    const ASKED: usize = 10;
    let counts: Vec<(u64, u64)> = (0..2_000).map(|degree| (degree, 2)).collect();
    let counts = DegreeCounts::from_pairs(&counts).unwrap();
    let arrivals = ArrivalPlan::constant(50.0).unwrap();
    let mix = AttachmentMix::new(0.7).unwrap();
    let forces = GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap();
    for forces in [forces.clone(), forces.with_dormant_share(0.3).unwrap()] {
        let course = Course::new(&counts, forces, 300.0).unwrap();
        let asked = Cell::new(0);
        let cancelled = || {
            asked.set(asked.get() + 1);
            asked.get() == ASKED
        };
        let law = NetworkLaw::at(&course, &counts, 300.0).unwrap().until(&cancelled);
        assert_eq!(law.tail(1_500, Accuracy::Full), Err(GrowthError::Cancelled));
        assert_eq!(asked.get(), ASKED, "nothing is computed after the answer");
        assert!(
            law.tail(1_500, Accuracy::Working).is_ok_and(|tail| tail.mean > 0.0),
            "asked again, it goes on to the end"
        );
    }
}

//! The incomplete beta function against 60 digits, and what tails make of it against one inversion or closed form a degree.

use tailcast::growth::{Course, NetworkLaw, NodeLaw};
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};
use tailcast::numerics::binomial::incomplete_beta;
use tailcast::numerics::tolerances::Accuracy;

use crate::reference::{number, relative_error, rows};

/// mpmath, see `tests/reference/README.md`.
#[test]
fn the_incomplete_beta_function_is_that_of_sixty_digits() {
    let mut worst = (0.0, String::new());
    for row in rows("beta.csv") {
        let [a, b, x, value] = [0, 1, 2, 3].map(|i| number(&row[i]));
        let error = relative_error(incomplete_beta(a, b, x, 1.0 - x), value);
        if error > worst.0 {
            worst = (error, row.join(","));
        }
    }
    println!("{worst:?}");
    assert!(worst.0 < 1e-11, "{worst:?}");
}

fn counts() -> DegreeCounts {
    let pairs: Vec<(u64, u64)> = (0..300)
        .chain((300..40_000).step_by(331))
        .map(|k| (k, (1e6 / (k as f64 + 1.0).powf(2.2)).ceil() as u64))
        .collect();
    DegreeCounts::from_pairs(&pairs).unwrap()
}

/// Sums over every class, one law a degree, nothing left out.
fn check(forces: GrowthParameters, tolerance: f64) {
    let counts = counts();
    let course = Course::new(&counts, forces, 400.0).unwrap();
    let node = NodeLaw::between(&course, 0.0, 400.0);
    for threshold in [1, 7, 60, 350, 5_000, 60_000] {
        let law = NetworkLaw::at(&course, &counts, 400.0).unwrap();
        let parts = law.parts(threshold, Accuracy::Full).unwrap();
        let whole: f64 = counts.iter().map(|(k, n)| n as f64 * node.tail(k, threshold).unwrap()).sum();
        let sum: f64 = parts.present.iter().map(|class| class.nodes * class.probability).sum();
        if whole < 1e-15 {
            assert!(sum < 1e-15, "{threshold}: {sum}");
            continue;
        }
        assert!(relative_error(sum, whole) < tolerance, "{threshold}: {sum} and {whole}");
        for class in &parts.present {
            let own = node.tail(class.degree, threshold).unwrap();
            let near = (class.probability - own).abs() * class.nodes < tolerance * whole;
            assert!(near, "{threshold} from {}: {} and {own}", class.degree, class.probability);
        }
        let tail = law.tail(threshold, Accuracy::Full).unwrap();
        assert!(relative_error(tail.mean, sum + parts.newcomers) < 1e-12, "{threshold}: {tail:?}");
    }
}

fn forces(links: f64) -> GrowthParameters {
    let arrivals = ArrivalPlan::constant(3_000.0).unwrap();
    let mix = AttachmentMix::new(0.8).unwrap();
    GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), links).unwrap()
}

#[test]
fn classes_that_are_left_out_do_not_matter_and_steps_are_as_good_as_leaps() {
    check(forces(counts().mean_degree()), 1e-10);
}

#[test]
fn shared_contours_are_as_good_as_contours_of_their_own() {
    check(forces(0.4 * counts().mean_degree()), 1e-8);
    check(forces(counts().mean_degree()).with_losses(0.0, 0.0004).unwrap(), 1e-8);
}

/// The closed form for newcomers of each day by the present law, beside the law of a node that arrives that day.
#[test]
fn newcomers_have_the_present_law_for_what_lands_after_them() {
    for (share, per_node_day) in [(0.0, 0.0), (0.5, 0.0), (0.5, 0.002), (1.0, 0.0)] {
        let counts = DegreeCounts::from_pairs(&[(1, 600), (2, 300), (7, 100)]).unwrap();
        let links = counts.mean_degree() - 1.0;
        let arrivals = ArrivalPlan::constant(4.0).unwrap();
        let mix = AttachmentMix::new(share).unwrap();
        let forces =
            GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(1), links).unwrap();
        let course = Course::new(&counts, forces.with_links_per_node_day(per_node_day).unwrap(), 300.0).unwrap();
        let law = NetworkLaw::at(&course, &counts, 300.0).unwrap();
        for threshold in [2, 5, 12] {
            // Simpson's rule over the arrivals.
            let (steps, mut sum) = (600, 0.0);
            for i in 0..=steps {
                let day = 300.0 * f64::from(i) / f64::from(steps);
                let weight = if i == 0 || i == steps { 1.0 } else { 2.0 + 2.0 * f64::from(i % 2) };
                sum += weight * NodeLaw::between(&course, day, 300.0).tail(1, threshold).unwrap();
            }
            let expected = 4.0 * 300.0 / f64::from(steps) / 3.0 * sum;
            let found = law.parts(threshold, Accuracy::Full).unwrap().newcomers;
            assert!(relative_error(found, expected) < 1e-7, "p = {share}, {threshold}: {found} and {expected}");
        }
    }
}

//! Scores against scoringrules (tests/reference/scores.py), closed forms and what a proper score must do.

use proptest::prelude::*;
use statrs::distribution::{Discrete, DiscreteCDF, Poisson};
use tailcast::evaluate::{Coverage, absolute_error, crps, interval_score, log_error};
use tailcast::forecast::CountLaw;
use tailcast::model::Interval;
use tailcast::numerics::{ranked_score::ranked_score, two_moments::TwoMoments};

use crate::reference::{number, relative_error, rows};

#[test]
fn crps_matches_scoringrules_and_sums() {
    let mut worst = 0.0f64;
    for row in rows("scores.csv") {
        let v: Vec<f64> = row[..4].iter().map(|c| number(c)).collect();
        let [mean, variance, observed, expected] = v[..] else { panic!("{row:?}") };
        let error = relative_error(ranked_score(&TwoMoments { mean, variance }, observed), expected);
        let allowed = if variance < 2_500.0 { 1e-9 } else { 1e-5 };
        assert!(error < allowed, "{row:?}: off by {error:e}");
        worst = worst.max(error);
    }
    assert!(worst > 0.0, "the table was read");
}

#[test]
fn interval_score_matches_scoringrules() {
    for row in rows("interval_scores.csv") {
        let v: Vec<f64> = row.iter().map(|c| number(c)).collect();
        let [level, low, high, observed, expected] = v[..] else { panic!("{row:?}") };
        assert!(relative_error(interval_score(&Interval { level, low, high }, observed), expected) < 1e-12, "{row:?}");
    }
}

#[test]
fn crps_of_a_rare_count_is_its_closed_form() {
    // A Poisson count of rate λ → 0 is 1 with probability about λ: CRPS at 0 is λ² and at 1 is (1 − λ)².
    for rate in [1e-3, 1e-6] {
        let law = CountLaw::new(0.0, rate, rate);
        assert!(relative_error(crps(&law, 0.0), rate * rate) < 2.0 * rate);
        assert!(relative_error(crps(&law, 1.0), (1.0 - rate).powi(2)) < 2.0 * rate);
    }
}

#[test]
fn a_binomial_with_a_broken_number_of_trials_scores_by_its_distribution_function() {
    // 5.5 trials at 0.9 have the distribution function of TwoMoments.
    let law = CountLaw::new(0.0, 4.95, 0.495);
    for observed in [0.0, 4.0, 5.0, 6.0, 9.0] {
        let summed: f64 = (0..40)
            .map(|x| (law.rest().at_most(f64::from(x)) - f64::from(u8::from(f64::from(x) >= observed))).powi(2))
            .sum();
        assert!(relative_error(crps(&law, observed), summed) < 1e-10, "{observed}");
    }
}

#[test]
fn crps_nears_the_absolute_error_as_the_variance_vanishes() {
    for mean in [3.0, 1e4, 1e7] {
        for away in [-1e3f64, -2.0, 0.0, 5.0, 1e6] {
            let observed = (mean + away).max(0.0);
            let score = crps(&CountLaw::new(0.0, mean, 1e-9), observed);
            assert!((score - absolute_error(mean, observed)).abs() < 1e-4, "{mean} {observed} {score}");
        }
    }
}

#[test]
fn the_certain_part_only_shifts() {
    let (bare, floored) = (CountLaw::new(0.0, 12.0, 30.0), CountLaw::new(1_000.0, 12.0, 30.0));
    for observed in [0.0, 7.0, 40.0] {
        assert!(relative_error(crps(&floored, 1_000.0 + observed), crps(&bare, observed)) < 1e-12);
    }
    // Below the support every unit counts in full.
    assert!((crps(&floored, 900.0) - crps(&floored, 1_000.0) - 100.0).abs() < 1e-9);
}

#[test]
fn crps_is_least_in_expectation_for_the_true_law() {
    let truth = Poisson::new(20.0).unwrap();
    let expected = |law: CountLaw| (0..100).map(|y| truth.pmf(y) * crps(&law, y as f64)).sum::<f64>();
    let best = expected(CountLaw::new(0.0, 20.0, 20.0));
    // Of the true law it is half of E|X − X'|: Σ F·(1 − F).
    let gini: f64 = (0..100).map(|y| truth.cdf(y) * (1.0 - truth.cdf(y))).sum();
    assert!(relative_error(best, gini) < 1e-9);
    for (mean, variance) in [(19.0, 20.0), (21.0, 20.0), (20.0, 15.0), (20.0, 26.0), (20.0, 4.0), (20.0, 100.0)] {
        assert!(expected(CountLaw::new(0.0, mean, variance)) > best * 1.001, "{mean} {variance}");
    }
}

#[test]
fn large_counts_score_like_one_shape_scaled() {
    // A gamma-like law a third of its mean wide: a hundredfold count scores a hundredfold.
    let law = |mean: f64| CountLaw::new(0.0, mean, mean + mean * mean / 9.0);
    for at in [0.2, 0.9, 1.0, 1.7, 4.0] {
        let (small, large) = (crps(&law(1e5), at * 1e5), crps(&law(1e7), at * 1e7));
        assert!(relative_error(large, 100.0 * small) < 1e-3, "{at}");
    }
}

#[test]
fn methods_meet_at_their_borders() {
    for ratio in [0.1, 0.9, 1.0, 2.0, 5.0, 20.0] {
        for z in [-2.0, 0.0, 0.7, 3.0] {
            let at = |variance: f64| {
                let law = CountLaw::new(0.0, variance / ratio, variance);
                let scaled = law.rest().mean + z * variance.sqrt();
                crps(&law, scaled) / variance.sqrt()
            };
            assert!(relative_error(at(2_499.999), at(2_500.001)) < 3e-4, "{ratio} {z}");
        }
    }
}

#[test]
fn log_error_and_coverage_keep_their_rules() {
    assert_eq!(log_error(0.0, 5.0), -(5f64.ln()));
    assert_eq!(log_error(0.0, 0.0), 0.0);
    let mut coverage = Coverage::default();
    assert_eq!((coverage.share(), coverage.bounds(0.9)), (None, None));
    for observed in [9.0, 10.0, 15.0, 20.0, 21.0] {
        coverage.count(&Interval { level: 0.5, low: 10.0, high: 20.0 }, observed);
    }
    let mut twice = coverage;
    twice.add(coverage);
    assert_eq!((twice.inside, twice.cases, coverage.share()), (6, 10, Some(0.6)));
    // Clopper–Pearson at 95 % for 6 of 10: 0.2624 to 0.8784 (from memory).
    let bounds = twice.bounds(0.95).unwrap();
    assert!((bounds.low - 0.2624).abs() < 1e-4 && (bounds.high - 0.8784).abs() < 1e-4, "{bounds:?}");
}

proptest! {
    #[test]
    fn any_law_scores_between_nothing_and_the_mean_error(
        log_mean in -12.0..17.0f64, log_ratio in -8.0..30.0f64, away in -5.0..40.0f64, floor in 0u32..10
    ) {
        let mean = log_mean.exp();
        let law = CountLaw::new(f64::from(floor), mean, mean * log_ratio.exp());
        let deviation = law.rest().variance.sqrt();
        let observed = (f64::from(floor) + mean + away * deviation).max(0.0).round();
        let score = crps(&law, observed);
        let most = (observed - f64::from(floor) - mean).abs() + deviation + 1.0;
        prop_assert!(score.is_finite() && score >= 0.0 && score <= most, "{score} {most}");
    }
}

//! Probabilities of normal and Student vectors against scipy (tests/reference/orthant.py) and closed forms.

use nalgebra::DMatrix;
use statrs::distribution::{ContinuousCDF, Normal};
use tailcast::numerics::orthant::{Bridge, OrthantError, orthant_probability};

use crate::reference::{number, rows};

fn matrix(size: usize, correlation: impl Fn(usize, usize) -> f64) -> DMatrix<f64> {
    DMatrix::from_fn(size, size, |i, j| if i == j { 1.0 } else { correlation(i.min(j), i.max(j)) })
}

/// Positions of Brownian motion at times 1, 2, …
fn brownian(size: usize) -> DMatrix<f64> {
    matrix(size, |i, j| ((i + 1) as f64 / (j + 1) as f64).sqrt())
}

fn normal(correlation: &DMatrix<f64>, bounds: &[f64]) -> f64 {
    orthant_probability(correlation, bounds, f64::INFINITY, &[]).unwrap()
}

fn below(x: f64) -> f64 {
    Normal::standard().cdf(x)
}

#[test]
fn probabilities_are_those_of_scipy() {
    let mut worst: f64 = 0.0;
    for row in rows("orthant.csv") {
        let size = number(&row[2]) as usize;
        let correlation = match row[1].as_str() {
            "brownian" => brownian(size),
            "markov" => matrix(size, |i, j| 0.8f64.powi((j - i) as i32)),
            _ => matrix(size, |_, _| 0.5),
        };
        let bounds: Vec<f64> = (0..size).map(|i| number(&row[3]) + number(&row[4]) * i as f64).collect();
        let ours = orthant_probability(&correlation, &bounds, number(&row[0]), &[]).unwrap();
        let error = (ours - number(&row[5])).abs();
        println!("{row:?}: {ours:.7}, off by {error:.1e}");
        worst = worst.max(error);
    }
    println!("worst {worst:e}");
    assert!(worst < 1e-3, "{worst:e}");
}

#[test]
fn independent_coordinates_multiply() {
    let bounds = [0.3, -0.5, 1.2, f64::INFINITY, 2.0];
    let ours = normal(&matrix(5, |_, _| 0.0), &bounds);
    assert!((ours - bounds.map(below).iter().product::<f64>()).abs() < 1e-12);
    assert_eq!(normal(&matrix(2, |_, _| 0.0), &[1.0, f64::NEG_INFINITY]), 0.0);
    assert_eq!(normal(&matrix(3, |_, _| 0.7), &[f64::INFINITY; 3]), 1.0);
}

/// Sheppard 1899: ¼ + arcsin(ρ)/2π.
#[test]
fn two_coordinates_below_their_means_follow_the_arcsine() {
    for rho in [-0.99f64, -0.5, 0.0, 0.3, 0.9, 0.999] {
        let exact = 0.25 + rho.asin() / std::f64::consts::TAU;
        let ours = normal(&matrix(2, |_, _| rho), &[0.0, 0.0]);
        assert!((ours - exact).abs() < 1e-4, "{rho}: {ours} and {exact}");
    }
}

#[test]
fn determined_coordinates_bound_those_that_determine_them() {
    let bounds = [0.8, 0.2, 1.5];
    assert!((normal(&matrix(3, |_, _| 1.0), &bounds) - below(0.2)).abs() < 1e-9);
    // Opposites: −0.2 ≤ Z ≤ 0.8.
    let opposite = normal(&matrix(2, |_, _| -1.0), &[0.8, 0.2]);
    assert!((opposite - (below(0.8) - below(-0.2))).abs() < 1e-9);
    // The third is (Z₁ + Z₂)/√2: all three below 0 is as the first two below 0.
    let half = 0.5f64.sqrt();
    let sum = DMatrix::from_row_slice(3, 3, &[1.0, 0.0, half, 0.0, 1.0, half, half, half, 1.0]);
    assert!((normal(&sum, &[0.0; 3]) - 0.25).abs() < 1e-4);
    // With the first two free it is a plain normal variable.
    assert!((normal(&sum, &[f64::INFINITY, f64::INFINITY, 0.7]) - below(0.7)).abs() < 5e-4);
}

/// P(max B ≤ a over [0, T]) = 2Φ(a/√T) − 1 (reflection principle), whatever the grid when stretches are watched.
#[test]
fn watched_brownian_motion_follows_the_reflection_principle() {
    for size in [1, 2, 4, 16, 64] {
        for barrier in [0.5, 1.0, 2.0] {
            // Times 1 … n, barrier a·√n in the path's own unit, so the answer is the same for every n.
            let height = barrier * (size as f64).sqrt();
            let time = |i: usize| (i + 1) as f64;
            let bounds: Vec<f64> = (0..size).map(|i| height / time(i).sqrt()).collect();
            let bridges: Vec<Option<Bridge>> = (0..size)
                .map(|i| {
                    // The start has no scale of its own: take that of the first coordinate.
                    let before = if i == 0 { time(0) } else { time(i - 1) };
                    let deviation = (before * time(i)).sqrt().sqrt().recip();
                    Some(Bridge { from: height / before.sqrt(), to: bounds[i], deviation })
                })
                .collect();
            let ours = orthant_probability(&brownian(size), &bounds, f64::INFINITY, &bridges).unwrap();
            let exact = 2.0 * below(barrier) - 1.0;
            println!("{size} {barrier}: {ours} {exact}");
            let allowed = if size <= 4 { 5e-4 } else { 2.5e-3 };
            assert!((ours - exact).abs() < allowed, "{size} points, barrier {barrier}: {ours} and {exact}");
        }
    }
}

#[test]
fn the_probability_is_smooth_in_a_bound() {
    for degrees_of_freedom in [f64::INFINITY, 5.0] {
        let at = |shift: f64| {
            let bounds: Vec<f64> = (0..24).map(|i| 1.5 + shift - 0.02 * f64::from(i)).collect();
            orthant_probability(&brownian(24), &bounds, degrees_of_freedom, &[]).unwrap()
        };
        let slope = |step: f64| (at(step) - at(-step)) / (2.0 * step);
        let (wide, narrow) = (slope(1e-3), slope(1e-4));
        assert!((wide - narrow).abs() < 1e-6, "{wide} and {narrow}");
        assert!(narrow > 0.1);
    }
}

#[test]
fn what_is_no_vector_is_refused() {
    let refused = |m: &DMatrix<f64>, bounds: &[f64], freedom| orthant_probability(m, bounds, freedom, &[]).unwrap_err();
    let pair = matrix(2, |_, _| 0.5);
    assert!(matches!(refused(&pair, &[1.0], 3.0), OrthantError::Sizes { .. }));
    assert!(matches!(refused(&pair, &[1.0, f64::NAN], 3.0), OrthantError::NotANumber));
    assert!(matches!(refused(&pair, &[1.0, 1.0], 0.0), OrthantError::NotANumber));
    assert!(matches!(
        refused(&matrix(2, |_, _| 1.5), &[1.0, 1.0], 3.0),
        OrthantError::NotACorrelation { coordinate: 1 }
    ));
    assert!(matches!(
        refused(&matrix(3, |_, _| -0.9), &[1.0; 3], 3.0),
        OrthantError::NotACorrelation { coordinate: 2 }
    ));
}

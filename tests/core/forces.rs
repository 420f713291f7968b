//! Dormancy, growth variance and the power kernel: exact cases, and simulation.

use statrs::distribution::{Binomial, DiscreteCDF, NegativeBinomial};

use tailcast::growth::{Course, MomentLaw, NetworkLaw, NodeLaw, Simulation};
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};
use tailcast::numerics::tolerances::Accuracy;

const DAYS: f64 = 100.0;

fn forces(share: f64, arrivals: f64) -> GrowthParameters {
    let mix = AttachmentMix::new(share).unwrap();
    let arrivals = ArrivalPlan::constant(arrivals).unwrap();
    GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap()
}

fn counts() -> DegreeCounts {
    DegreeCounts::from_pairs(&[(0, 9_000), (1, 4_000), (2, 2_500), (5, 1_000), (12, 300), (40, 60), (150, 8)]).unwrap()
}

fn tail(counts: &DegreeCounts, forces: &GrowthParameters, threshold: u64) -> f64 {
    let course = Course::new(counts, forces.clone(), DAYS).unwrap();
    NetworkLaw::at(&course, counts, DAYS).unwrap().tail(threshold, Accuracy::Full).unwrap().mean
}

/// Uniform attachment: a gain is Poisson with a gamma-distributed mean, which is negative binomial of shape 1/σ²
/// (Greenwood & Yule 1920), here by statrs.
#[test]
fn growth_variance_under_uniform_attachment_is_negative_binomial() {
    let start = DegreeCounts::from_pairs(&[(4, 1_000)]).unwrap();
    for variance in [0.05, 0.4, 1.0] {
        // No newcomers to count: they are a ten-millionth of the nodes, and all the links land per node.
        let forces = forces(0.0, 1e-6).with_links_per_node_day(0.02).unwrap().with_growth_variance(variance).unwrap();
        let mean = 0.02 * DAYS;
        let law = NegativeBinomial::new(1.0 / variance, 1.0 / (1.0 + variance * mean)).unwrap();
        for gain in [1, 2, 5, 9] {
            let (ours, exact) = (tail(&start, &forces, 4 + gain) / 1e3, law.sf(gain - 1));
            // Eight nodes stand for the gamma law: its moments are exact, its tails nearly.
            assert!((ours / exact - 1.0).abs() < 5e-3, "variance {variance}, gain {gain}: {ours} {exact}");
        }
    }
}

/// Dormant nodes only lose links: each is kept with probability e^{−wt}, by statrs's binomial law.
#[test]
fn a_dormant_network_only_loses_links() {
    let start = DegreeCounts::from_pairs(&[(30, 1_000)]).unwrap();
    let forces = forces(0.5, 0.0).with_losses(0.0, 0.004).unwrap().with_dormant_share(0.5).unwrap();
    let exact = Binomial::new((-0.004 * DAYS).exp(), 30).unwrap();
    for threshold in [5, 18, 25, 30] {
        let (ours, exact) = (tail(&start, &forces, threshold) / 1e3, exact.sf(threshold - 1));
        assert!((ours / exact - 1.0).abs() < 1e-8, "{threshold}: {ours} {exact}");
    }
}

/// On the linear kernel the moment equations must give the moments of the exact law.
#[test]
fn moment_equations_agree_with_the_exact_law_on_the_linear_kernel() {
    for (share, departures, losses, kind) in [
        (0.0, 0.0, 0.0, DegreeKind::Received),
        (0.8, 0.0, 0.0, DegreeKind::Received),
        (0.8, 1e-3, 2e-3, DegreeKind::Received),
        (0.95, 1e-3, 5e-3, DegreeKind::Total),
        (1.0, 0.0, 1e-2, DegreeKind::Total),
    ] {
        let mut forces = forces(share, 120.0).with_losses(departures, losses).unwrap();
        forces.kind = kind;
        let course = Course::new(&counts(), forces, DAYS).unwrap();
        let (exact, moments) =
            (NodeLaw::between(&course, 0.0, DAYS), MomentLaw::solve(&course, &counts(), DAYS).unwrap());
        for &degree in counts().degrees() {
            let (mean, variance) = moments.moments(degree).unwrap();
            assert!(
                (mean - exact.mean(degree)).abs() <= 1e-8 * exact.mean(degree).max(1e-3),
                "{share} {degree}: {mean}"
            );
            let off = (variance - exact.variance(degree)).abs();
            assert!(off <= 1e-8 * exact.variance(degree).max(1e-3), "{share} {degree}: {variance}");
        }
    }
}

/// The mean-field answer with a force on against the mean of event-by-event simulations, in standard errors and per cent.
#[test]
fn forecasts_with_each_force_agree_with_simulation() {
    const RUNS: u64 = 60;
    let base = || forces(0.8, 60.0);
    let entry = EntryDegrees::from_shares(&[(0, 0.5), (1, 0.2), (3, 0.2), (20, 0.1)]).unwrap();
    let mut total = base().with_losses(1e-3, 1e-3).unwrap();
    (total.kind, total.entry) = (DegreeKind::Total, entry);
    // (forces, per cent allowed beyond sampling): exact laws none; the moment laws are approximate.
    let cases = [
        ("losses", base().with_losses(2e-3, 3e-3).unwrap(), 0.0),
        ("total", total, 0.0),
        ("dormancy", base().with_dormant_share(0.4).unwrap(), 0.0),
        ("growth variance", base().with_growth_variance(0.5).unwrap(), 0.0),
        (
            "all linear ones",
            base().with_losses(2e-3, 1e-3).unwrap().with_dormant_share(0.3).unwrap().with_growth_variance(0.3).unwrap(),
            0.0,
        ),
        ("power 0.7", base().with_kernel_exponent(0.7).unwrap(), 0.05),
        ("power 1.2", base().with_kernel_exponent(1.2).unwrap(), 0.05),
        ("power 0.8 with losses", base().with_kernel_exponent(0.8).unwrap().with_losses(1e-3, 2e-3).unwrap(), 0.05),
    ];
    for (name, forces, allowed) in cases {
        let came: Vec<DegreeCounts> = (0..RUNS)
            .map(|seed| {
                let mut network = Simulation::new(&counts(), forces.clone(), seed).unwrap();
                network.run_until(DAYS).unwrap();
                network.degree_counts().unwrap()
            })
            .collect();
        for threshold in [1, 3, 8, 20, 50, 160] {
            let sizes: Vec<f64> = came.iter().map(|counts| counts.tail_size(threshold) as f64).collect();
            let mean = sizes.iter().sum::<f64>() / RUNS as f64;
            let variance = sizes.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (RUNS - 1) as f64;
            let error = (variance / RUNS as f64).sqrt().max(0.02);
            let ours = tail(&counts(), &forces, threshold);
            println!("{name} {threshold}: {ours:.3} against {mean:.3} ± {error:.3}");
            assert!((ours - mean).abs() < 3.9 * error + allowed * mean, "{name}, {threshold}: {ours} {mean} ± {error}");
        }
    }
}

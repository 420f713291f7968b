//! Degree counts condensed to a few weighted points.

use std::f64::consts::PI;

use crate::model::DegreeCounts;

/// Degrees up to this are kept one by one.
const SINGLE: u64 = 32;
/// Chebyshev points of one octave. With the nearest singularity at degree 0 or below, interpolation over an octave is good to
/// (3 + √8)^{−18} = 2·10⁻¹⁴.
const POINTS: usize = 18;

/// Points x with weights w such that Σ w·f(x) = Σ_k n_k·f(k) for every f that is smooth above a degree.
///
/// # Numerical notes
/// Each octave of degrees is replaced by the 18 Chebyshev points that interpolate over it (barycentric form: Berrut & Trefethen 2004,
/// doi:10.1137/S0036144502417715), where that is fewer. Cost: 18 operations a distinct degree, once.
pub(super) struct CondensedCounts {
    /// (x, w) in ascending x; weights may be negative.
    points: Vec<(f64, f64)>,
}

impl CondensedCounts {
    /// Condenses `counts` for functions that are analytic above `smooth_from` but for singularities at degrees of 0 or below.
    pub fn new(counts: &DegreeCounts, smooth_from: u64) -> Self {
        let (degrees, nodes) = (counts.degrees(), counts.nodes_by_degree());
        let mut points = Vec::new();
        let mut from = degrees.partition_point(|&k| k <= smooth_from.max(SINGLE));
        points.extend(degrees[..from].iter().zip(nodes).map(|(&k, &n)| (k as f64, n as f64)));
        while let Some(&low) = degrees.get(from) {
            let to = from + degrees[from..].partition_point(|&k| k <= low.saturating_mul(2));
            let classes = degrees[from..to].iter().zip(&nodes[from..to]).map(|(&k, &n)| (k as f64, n as f64));
            if to - from > POINTS {
                points.extend(octave(low as f64, classes))
            } else {
                points.extend(classes)
            }
            from = to;
        }
        Self { points }
    }

    /// (x, w) in ascending x.
    pub fn points(&self) -> impl ExactSizeIterator<Item = (f64, f64)> {
        self.points.iter().copied()
    }
}

/// Chebyshev points over [low, 2·low], with what each stands for of `classes`.
fn octave(low: f64, classes: impl Iterator<Item = (f64, f64)>) -> [(f64, f64); POINTS] {
    let angle = |i: usize| PI * (i as f64 + 0.5) / POINTS as f64;
    let places: [f64; POINTS] = std::array::from_fn(|i| 0.5 * low * (3.0 - angle(i).cos()));
    let barycentric: [f64; POINTS] = std::array::from_fn(|i| if i % 2 == 0 { angle(i).sin() } else { -angle(i).sin() });
    let mut weights = [0.0; POINTS];
    for (degree, nodes) in classes {
        if let Some(met) = places.iter().position(|&place| place == degree) {
            weights[met] += nodes;
            continue;
        }
        let shares: [f64; POINTS] = std::array::from_fn(|i| barycentric[i] / (degree - places[i]));
        let scale = nodes / shares.iter().sum::<f64>();
        weights.iter_mut().zip(shares).for_each(|(weight, share)| *weight += scale * share);
    }
    std::array::from_fn(|i| (places[i], weights[i]))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn smooth_sums_are_those_of_the_counts() {
        let pairs: Vec<(u64, u64)> =
            (0..3_000).map(|k| (k, 1 + 1_000_000 / (1 + k * k))).chain([(90_000, 2)]).collect();
        let counts = DegreeCounts::from_pairs(&pairs).unwrap();
        let condensed = CondensedCounts::new(&counts, 3);
        assert!(condensed.points.len() < 200, "{}", condensed.points.len());
        assert!(condensed.points.is_sorted_by(|a, b| a.0 < b.0));
        for f in [|_: f64| 1.0, |k: f64| k, |k: f64| (k + 0.25).ln(), |k: f64| 1.0 / (k + 1.0)] {
            let whole: f64 = counts.iter().map(|(k, n)| n as f64 * f(k as f64)).sum();
            let sum: f64 = condensed.points().map(|(x, w)| w * f(x)).sum();
            assert!((sum / whole - 1.0).abs() < 1e-13, "{sum} {whole}");
        }
    }
}

//! Probability that a normal or Student vector lies below bounds, watched between its coordinates where asked.

use nalgebra::DMatrix;
use statrs::distribution::{ChiSquared, ContinuousCDF, Normal};

use super::tolerances::{ORTHANT_MAX_DIMENSION, ORTHANT_PIVOT, ORTHANT_POINTS};

/// The largest argument at which the normal law still differs from 0 or 1 by more than rounding.
const FARTHEST: f64 = 8.3;

/// The stretch of a path that leads to a coordinate, during which it must stay below a barrier too.
///
/// Positions are standardised: the path's position over the standard deviation of the coordinate at that end.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bridge {
    /// The barrier at the stretch's start; at the known start of the whole path, its distance from there.
    pub from: f64,
    /// The barrier at the stretch's end, at least the coordinate's bound.
    pub to: f64,
    /// Standard deviation of the path's increment over the geometric mean of the scales that `from` and `to` are in.
    pub deviation: f64,
}

/// Why there is no such probability.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum OrthantError {
    /// Bounds, bridges and correlation do not fit together.
    #[error(
        "a vector of 1 to {ORTHANT_MAX_DIMENSION} coordinates needs as many bounds, and a bridge for each or none; there \
         are {bounds} bounds, {bridges} bridges and {rows} rows"
    )]
    Sizes {
        /// Bounds given.
        bounds: usize,
        /// Bridges given.
        bridges: usize,
        /// Rows of the correlation matrix.
        rows: usize,
    },
    /// No vector has such a correlation.
    #[error(
        "the correlations are not those of any vector: coordinate {coordinate} would have a negative variance left"
    )]
    NotACorrelation {
        /// Index of the coordinate.
        coordinate: usize,
    },
    /// A bound or barrier is not a number, a deviation not finite, or the degrees of freedom not positive.
    #[error("bounds and barriers must be numbers, deviations finite and degrees of freedom positive")]
    NotANumber,
}

/// P(Z₁ ≤ b₁, …, Zₙ ≤ bₙ) for standardised Z with correlation `correlation` (its lower triangle is read): normal where
/// `degrees_of_freedom` is infinite, else Student with that many.
///
/// `bridges` is empty, or has an entry for each coordinate: entry i watches the stretch that leads from coordinate i − 1 to
/// coordinate i, entry 0 the one from a known start. The probability is then that of a path which is a Brownian bridge
/// between the coordinates and stays below the barrier throughout. In the Student case the path's scale is unknown, that of
/// the bridges with it.
///
/// Formula: separation of variables with Z = L·y and L the Cholesky factor (Genz 1992), for Student with a scale √(χ²_ν/ν) on
/// every bound and barrier (Genz & Bretz 1999). Where nothing of a coordinate's variance is left, its bound is one on the
/// last coordinate that it depends on (Genz & Kwong 2000). Each bridge contributes
/// `1 − exp(−2·(c₀ − z₀)·(c₁ − z₁)/s²)`.
///
/// # Numerical notes
/// 10,000 points of a fixed lattice (Richtmyer 1951: multiples of square roots of primes) folded by the baker's transform, in
/// the order of the coordinates: no random numbers and no reordering, so the result is a smooth function of bounds,
/// barriers and correlations that a root finder can invert. Absolute error of a watched Brownian path: 10⁻⁴ with 4 coordinates,
/// up to 2·10⁻³ with 16 to 64, so a coarse grid with bridges is better than a fine one. Cost: 10,000 × (n²/2 products, n normal
/// laws and quantiles).
///
/// # Errors
/// [`OrthantError`] when the input is not that of a vector.
///
/// # References
/// Genz 1992, doi:10.1080/10618600.1992.10477010; Genz & Bretz 1999, J. Stat. Comput. Simul. 63; Genz & Kwong 2000, J. Stat.
/// Comput. Simul. 68; the bridge's factor from memory of Karatzas & Shreve 1991, section 4.3.
///
/// ```
/// use nalgebra::DMatrix;
/// use tailcast::numerics::orthant::orthant_probability;
/// let correlation = DMatrix::from_row_slice(2, 2, &[1.0, 0.5, 0.5, 1.0]);
/// let both = orthant_probability(&correlation, &[0.0, 0.0], f64::INFINITY, &[]).unwrap();
/// assert!((both - 1.0 / 3.0).abs() < 1e-4);
/// ```
pub fn orthant_probability(
    correlation: &DMatrix<f64>,
    bounds: &[f64],
    degrees_of_freedom: f64,
    bridges: &[Option<Bridge>],
) -> Result<f64, OrthantError> {
    let size = bounds.len();
    let fits = (1..=ORTHANT_MAX_DIMENSION).contains(&size) && correlation.shape() == (size, size);
    if !fits || !(bridges.is_empty() || bridges.len() == size) {
        let (bridges, rows) = (bridges.len(), correlation.nrows());
        return Err(OrthantError::Sizes { bounds: size, bridges, rows });
    }
    let unclear = bridges.iter().flatten().any(|b| b.from.is_nan() || b.to.is_nan() || !b.deviation.is_finite());
    let no_freedom = degrees_of_freedom.is_nan() || degrees_of_freedom <= 0.0;
    if unclear || no_freedom || bounds.iter().any(|bound| bound.is_nan()) {
        return Err(OrthantError::NotANumber);
    }
    let scales = ScaleTable::new(degrees_of_freedom);
    let integrand = Integrand { coordinates: factorise(correlation)?, bounds, bridges };
    let roots = prime_roots(size + 1);
    let mut point = vec![0.0; size + 1];
    let mut space = Space { variables: vec![0.0; size], values: vec![0.0; size] };
    let mut sum = 0.0;
    for index in 1..=ORTHANT_POINTS {
        for (coordinate, root) in point.iter_mut().zip(&roots) {
            // Half a step aside, so that the point set is symmetric and none falls on an edge.
            *coordinate = (2.0 * ((index as f64 - 0.5) * root).fract() - 1.0).abs();
        }
        let [first, others @ ..] = point.as_slice() else { break };
        let scale = scales.as_ref().map_or(1.0, |scales| scales.at(*first));
        // Above 0, or an infinite bound would turn into none.
        let scale = scale.max(f64::MIN_POSITIVE);
        sum += integrand.at(scale, others, &mut space);
    }
    Ok((sum / ORTHANT_POINTS as f64).clamp(0.0, 1.0))
}

/// Quantiles of √(χ²_ν/ν), linear between 1,024 of them: each is a search of its own, and every point needs one.
struct ScaleTable(Vec<f64>);

impl ScaleTable {
    const ROWS: usize = 1_024;

    /// None where the law is normal.
    fn new(degrees_of_freedom: f64) -> Option<Self> {
        let law = ChiSquared::new(degrees_of_freedom).ok().filter(|_| degrees_of_freedom.is_finite())?;
        let row = |i: usize| {
            let probability = (i as f64 + 0.5) / Self::ROWS as f64;
            (law.inverse_cdf(probability) / degrees_of_freedom).sqrt()
        };
        Some(Self((0..Self::ROWS).map(row).collect()))
    }

    fn at(&self, probability: f64) -> f64 {
        let place = (probability * Self::ROWS as f64 - 0.5).clamp(0.0, (Self::ROWS - 1) as f64);
        let before = (place as usize).min(Self::ROWS - 2);
        self.0[before] + (self.0[before + 1] - self.0[before]) * (place - before as f64)
    }
}

/// A row of the Cholesky factor.
struct Coordinate {
    /// Weights of the earlier variables.
    weights: Vec<f64>,
    /// Weight of its own variable; 0 where the earlier ones determine it.
    own: f64,
    /// Determined coordinates whose last variable this is, with that variable's weight.
    determines: Vec<(usize, f64)>,
}

/// The Cholesky factor of a matrix that may be singular.
fn factorise(correlation: &DMatrix<f64>) -> Result<Vec<Coordinate>, OrthantError> {
    let mut rows: Vec<Coordinate> = Vec::with_capacity(correlation.nrows());
    for i in 0..correlation.nrows() {
        let mut weights: Vec<f64> = Vec::with_capacity(i);
        for (j, earlier) in rows.iter().enumerate() {
            let common = dot(&weights, &earlier.weights);
            weights.push(if earlier.own > 0.0 { (correlation[(i, j)] - common) / earlier.own } else { 0.0 });
        }
        let left = correlation[(i, i)] - dot(&weights, &weights);
        if left.is_nan() || left < -ORTHANT_PIVOT.sqrt() {
            return Err(OrthantError::NotACorrelation { coordinate: i });
        }
        let own = if left > ORTHANT_PIVOT { left.sqrt() } else { 0.0 };
        if own == 0.0 {
            let last = weights.iter().rposition(|weight| weight.abs() > ORTHANT_PIVOT.sqrt());
            if let Some(earlier) = last.and_then(|last| rows.get_mut(last)) {
                let weight = weights[earlier.weights.len()];
                earlier.determines.push((i, weight));
            }
        }
        rows.push(Coordinate { weights, own, determines: Vec::new() });
    }
    Ok(rows)
}

struct Integrand<'a> {
    coordinates: Vec<Coordinate>,
    bounds: &'a [f64],
    bridges: &'a [Option<Bridge>],
}

/// Room for one evaluation.
struct Space {
    variables: Vec<f64>,
    values: Vec<f64>,
}

impl Integrand<'_> {
    /// The product of conditional probabilities at a point of the unit cube.
    fn at(&self, scale: f64, point: &[f64], space: &mut Space) -> f64 {
        let mut product = 1.0;
        for (i, coordinate) in self.coordinates.iter().enumerate() {
            let mean = dot(&coordinate.weights, &space.variables);
            if coordinate.own > 0.0 {
                let (low, high) = self.limits(i, mean, scale, space);
                let (low, high) = (below(low), below(high));
                let share = high - low;
                if share <= 0.0 {
                    return 0.0;
                }
                product *= share;
                space.variables[i] = quantile(low + point[i] * share);
            } else {
                space.variables[i] = 0.0;
            }
            space.values[i] = mean + coordinate.own * space.variables[i];
            if let Some(Some(bridge)) = self.bridges.get(i) {
                let before = i.checked_sub(1).map_or(0.0, |i| space.values[i]);
                let (from, to) = (scale * bridge.from - before, scale * bridge.to - space.values[i]);
                product *= stays_below(from, to, bridge.deviation);
            }
        }
        product
    }

    /// Between which values variable i keeps its own coordinate, and those that it determines, below their bounds.
    fn limits(&self, i: usize, mean: f64, scale: f64, space: &Space) -> (f64, f64) {
        let coordinate = &self.coordinates[i];
        let (mut low, mut high) = (f64::NEG_INFINITY, (scale * self.bounds[i] - mean) / coordinate.own);
        for &(other, weight) in &coordinate.determines {
            let mean = dot(&self.coordinates[other].weights[..i], &space.variables);
            let limit = (scale * self.bounds[other] - mean) / weight;
            if weight > 0.0 { high = high.min(limit) } else { low = low.max(limit) }
        }
        (low, high)
    }
}

/// Probability that a Brownian bridge stays below a line, by its distances from it at both ends (reflection principle).
fn stays_below(from: f64, to: f64, deviation: f64) -> f64 {
    if from <= 0.0 || to <= 0.0 {
        return 0.0;
    }
    // Deviation 0 or a distance of infinity: the exponent is −∞, and the path certainly stays below.
    -(-2.0 * from * to / (deviation * deviation)).exp_m1()
}

fn below(x: f64) -> f64 {
    Normal::standard().cdf(x)
}

fn quantile(probability: f64) -> f64 {
    // A probability that rounds to 0 or 1 would put the variable at infinity.
    Normal::standard().inverse_cdf(probability.clamp(0.0, 1.0)).clamp(-FARTHEST, FARTHEST)
}

/// Over the length of the shorter.
fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(a, b)| a * b).sum()
}

/// Square roots of the first `count` primes.
fn prime_roots(count: usize) -> Vec<f64> {
    let mut primes: Vec<u32> = Vec::with_capacity(count);
    let candidates = (2..).filter(|n| n % 2 == 1 || *n == 2);
    for candidate in candidates {
        if primes.len() == count {
            break;
        }
        if primes.iter().take_while(|&&p| p * p <= candidate).all(|p| candidate % p != 0) {
            primes.push(candidate);
        }
    }
    primes.into_iter().map(|prime| f64::from(prime).sqrt()).collect()
}

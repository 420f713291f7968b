//! Maximum likelihood in a few dimensions.

use nalgebra::{DMatrix, DVector};

use super::tolerances::{SCORING_GAIN, SCORING_MAX_STEPS};

/// A maximum of a log-likelihood Σ n_i·ℓ_i(θ).
#[derive(Debug, Clone)]
pub struct ScoringMaximum {
    /// θ.
    pub at: Vec<f64>,
    /// Log-likelihood there.
    pub value: f64,
    /// Covariance of θ: H⁻¹JH⁻¹ with the curvature H and the scores' scatter J, right also when the model is not (Huber 1967).
    pub covariance: DMatrix<f64>,
    /// Whether the last step gained less than 10⁻⁶ before the cap of 100 steps.
    pub converged: bool,
}

/// Half-width of difference quotients; parameters are logarithms, logits or of order one.
const STEP: f64 = 1e-4;
/// After so many steps by the scores' scatter alone the model is wrong enough for Newton's own steps to be shorter work.
const NEWTON_FROM: usize = 12;
/// Steps are stretched up to 2 to this power.
const LONGEST_STRETCH: u32 = 6;
/// A damping beyond this leaves no step worth taking.
const STIFFEST: f64 = 1e8;

/// Maximises Σ n_i·ℓ_i(θ) from `start` within the box `bounds`; `terms(θ)` gives every ℓ_i, `weights` the n_i.
///
/// Formula: scoring with the outer products of the rows' gradients (Berndt, Hall, Hall & Hausman 1974), damped after Levenberg
/// (1944) and Marquardt (1963); gradients by central differences.
///
/// ```
/// use tailcast::numerics::scoring::maximise;
/// // Three successes in ten, as a logit: the maximum is at ln(3/7), its variance 1/(10·0.3·0.7).
/// let terms = |theta: &[f64]| Ok::<_, ()>(vec![-(-theta[0]).exp().ln_1p(), -theta[0].exp().ln_1p()]);
/// let found = maximise(&[0.0], &[(-20.0, 20.0)], &[3.0, 7.0], terms).unwrap();
/// assert!(found.converged && (found.at[0] - (3.0f64 / 7.0).ln()).abs() < 1e-4);
/// assert!((found.covariance[(0, 0)] - 1.0 / 2.1).abs() < 1e-4);
/// ```
///
/// # Errors
/// The first error of `terms`, which may be that it was told to stop.
pub fn maximise<E>(
    start: &[f64],
    bounds: &[(f64, f64)],
    weights: &[f64],
    mut terms: impl FnMut(&[f64]) -> Result<Vec<f64>, E>,
) -> Result<ScoringMaximum, E> {
    let size = start.len();
    let total = |terms: &[f64]| terms.iter().zip(weights).map(|(l, n)| n * l).sum::<f64>();
    let mut at = start.to_vec();
    let mut value = total(&terms(&at)?);
    let (mut damping, mut converged) = (1e-3, false);
    for number in 0..SCORING_MAX_STEPS {
        let (gradient, mut scatter) = scores(&at, bounds, weights, &mut terms)?;
        if number >= NEWTON_FROM {
            let curved = curvature(&at, bounds, weights, &mut terms)?;
            if curved.clone().cholesky().is_some() {
                scatter = curved;
            }
        }
        let mut gained = 0.0;
        while damping < STIFFEST {
            let mut system = scatter.clone();
            for i in 0..size {
                system[(i, i)] += damping * scatter[(i, i)].max(1e-9);
            }
            let Some(step) = system.cholesky().map(|factor| factor.solve(&gradient)) else {
                damping *= 10.0;
                continue;
            };
            let reach = |length: f64| -> Vec<f64> {
                let moved = |i: usize| at[i] + (length * step[i]).clamp(-2.0, 2.0);
                (0..size).map(|i| moved(i).clamp(bounds[i].0, bounds[i].1)).collect()
            };
            let mut trial = reach(1.0);
            let mut found = total(&terms(&trial)?);
            if found <= value {
                damping *= 10.0;
                continue;
            }
            // Where the model is wrong the scores scatter more than the likelihood curves, and the step comes out short.
            for doubling in 1..=LONGEST_STRETCH {
                let farther = reach(f64::from(1 << doubling));
                let there = total(&terms(&farther)?);
                if there <= found {
                    break;
                }
                (trial, found) = (farther, there);
            }
            (gained, at, value) = (found - value, trial, found);
            damping = (0.1 * damping).max(1e-9);
            break;
        }
        if gained < SCORING_GAIN {
            converged = true;
            break;
        }
    }
    let (_, scatter) = scores(&at, bounds, weights, &mut terms)?;
    let covariance = sandwich(&curvature(&at, bounds, weights, &mut terms)?, &scatter);
    Ok(ScoringMaximum { at, value, covariance, converged })
}

/// Σ n·g and Σ n·g·gᵀ over the rows' gradients g; a parameter at a bound has its difference taken inwards.
fn scores<E>(
    at: &[f64],
    bounds: &[(f64, f64)],
    weights: &[f64],
    terms: &mut impl FnMut(&[f64]) -> Result<Vec<f64>, E>,
) -> Result<(DVector<f64>, DMatrix<f64>), E> {
    let size = at.len();
    let slopes: Vec<Vec<f64>> = (0..size)
        .map(|i| {
            let end = |sign: f64| (at[i] + sign * STEP).clamp(bounds[i].0, bounds[i].1);
            let (low, high) = (end(-1.0), end(1.0));
            let mut moved = at.to_vec();
            moved[i] = high;
            let above = terms(&moved)?;
            moved[i] = low;
            let below = terms(&moved)?;
            Ok(above.iter().zip(&below).map(|(a, b)| (a - b) / (high - low)).collect())
        })
        .collect::<Result<_, E>>()?;
    let weighted = |i: usize, j: Option<usize>| -> f64 {
        let row = |(row, n): (usize, &f64)| n * slopes[i][row] * j.map_or(1.0, |j| slopes[j][row]);
        weights.iter().enumerate().map(row).sum()
    };
    let gradient = DVector::from_fn(size, |i, _| weighted(i, None));
    Ok((gradient, DMatrix::from_fn(size, size, |i, j| weighted(i, Some(j)))))
}

/// −Hessian of the log-likelihood by differences.
fn curvature<E>(
    at: &[f64],
    bounds: &[(f64, f64)],
    weights: &[f64],
    terms: &mut impl FnMut(&[f64]) -> Result<Vec<f64>, E>,
) -> Result<DMatrix<f64>, E> {
    const WIDE: f64 = 30.0 * STEP;
    let size = at.len();
    let mut total = |moves: &[(usize, f64)]| -> Result<f64, E> {
        let mut moved = at.to_vec();
        for &(i, by) in moves {
            moved[i] = (moved[i] + by * WIDE).clamp(bounds[i].0, bounds[i].1);
        }
        Ok(terms(&moved)?.iter().zip(weights).map(|(l, n)| n * l).sum())
    };
    let here = total(&[])?;
    let mut curvature = DMatrix::zeros(size, size);
    for i in 0..size {
        curvature[(i, i)] = -(total(&[(i, 1.0)])? - 2.0 * here + total(&[(i, -1.0)])?) / (WIDE * WIDE);
        for j in 0..i {
            let (up, down) = (total(&[(i, 1.0), (j, 1.0)])?, total(&[(i, -1.0), (j, -1.0)])?);
            let cross = up + down - total(&[(i, 1.0), (j, -1.0)])? - total(&[(i, -1.0), (j, 1.0)])?;
            curvature[(i, j)] = -cross / (4.0 * WIDE * WIDE);
            curvature[(j, i)] = curvature[(i, j)];
        }
    }
    Ok(curvature)
}

/// H⁻¹JH⁻¹ of the curvature and the scores' scatter.
fn sandwich(curvature: &DMatrix<f64>, scatter: &DMatrix<f64>) -> DMatrix<f64> {
    let size = scatter.nrows();
    // A direction the data say nothing of (a rate at its floor) has no curvature: a ridge keeps it from spoiling the others.
    let ridge = |matrix: &DMatrix<f64>| matrix + DMatrix::from_diagonal_element(size, size, 1e-6);
    let inverse = ridge(curvature).cholesky().or_else(|| ridge(scatter).cholesky()).map(|factor| factor.inverse());
    let inverse = inverse.unwrap_or_else(|| DMatrix::from_diagonal_element(size, size, 1e6));
    &inverse * scatter * &inverse
}

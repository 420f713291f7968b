//! Minimisation in one dimension.

use super::tolerances::BRACKET_MAX_STEPS;

/// Where a minimum was found.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Minimum {
    /// The place.
    pub at: f64,
    /// The value there.
    pub value: f64,
    /// Whether the bracket shrank to the tolerance before the cap of 200 steps.
    pub converged: bool,
}

/// Finds a minimum of `f` in [low, high] to `tolerance` in x, ends included.
///
/// Formula: golden-section search with parabolic steps (Brent 1973, chapter 5). The ends are compared last, so a
/// minimum at a boundary is returned exactly.
///
/// ```
/// use tailcast::numerics::optimise::minimise;
/// let inner = minimise(0.0, 3.0, 1e-9, |x: f64| (x - 1.0).powi(2));
/// assert!((inner.at - 1.0).abs() < 1e-8 && inner.converged);
/// let edge = minimise(0.0, 3.0, 1e-9, |x: f64| x);
/// assert_eq!(edge.at, 0.0);
/// ```
pub fn minimise(low: f64, high: f64, tolerance: f64, mut f: impl FnMut(f64) -> f64) -> Minimum {
    const GOLDEN: f64 = 0.381_966_011_250_105_1; // (3 − √5)/2
    let (mut a, mut b) = (low, high);
    let mut x = a + GOLDEN * (b - a);
    let (mut w, mut v) = (x, x);
    let mut fx = f(x);
    let (mut fw, mut fv) = (fx, fx);
    let (mut step, mut before_last) = (0.0_f64, 0.0_f64);
    let mut converged = false;
    for _ in 0..BRACKET_MAX_STEPS {
        let middle = 0.5 * (a + b);
        let slack = tolerance.max(f64::EPSILON * x.abs());
        if (x - middle).abs() <= 2.0 * slack - 0.5 * (b - a) {
            converged = true;
            break;
        }
        let parabolic =
            parabola_step(x, w, v, fx, fw, fv).filter(|&d| d.abs() < 0.5 * before_last.abs() && x + d > a && x + d < b);
        before_last = if parabolic.is_some() {
            step
        } else if x < middle {
            b - x
        } else {
            a - x
        };
        step = parabolic.unwrap_or(GOLDEN * before_last);
        let u = if step.abs() >= slack { x + step } else { x + slack.copysign(step) };
        let fu = f(u);
        if fu <= fx {
            if u < x {
                b = x
            } else {
                a = x
            }
            (v, fv, w, fw, x, fx) = (w, fw, x, fx, u, fu);
        } else {
            if u < x {
                a = u
            } else {
                b = u
            }
            if fu <= fw || w == x {
                (v, fv, w, fw) = (w, fw, u, fu);
            } else if fu <= fv || v == x || v == w {
                (v, fv) = (u, fu);
            }
        }
    }
    let mut best = Minimum { at: x, value: fx, converged };
    for end in [low, high] {
        let value = f(end);
        if value <= best.value {
            best = Minimum { at: end, value, converged };
        }
    }
    best
}

/// The step from x to the minimum of the parabola through three points, if there is one.
fn parabola_step(x: f64, w: f64, v: f64, fx: f64, fw: f64, fv: f64) -> Option<f64> {
    let r = (x - w) * (fx - fv);
    let q = (x - v) * (fx - fw);
    let numerator = (x - v) * q - (x - w) * r;
    let denominator = 2.0 * (q - r);
    (denominator.abs() > f64::MIN_POSITIVE).then(|| -numerator / denominator)
}

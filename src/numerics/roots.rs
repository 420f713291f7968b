//! Bracketed root finding.

use super::tolerances::BRACKET_MAX_STEPS;

/// Finds where the increasing function `f` crosses zero in [low, high], to `tolerance` in x.
///
/// Formula: bisection with the Illinois variant of regula falsi (Dowell & Jarratt 1971); at most 200 steps.
/// Returns an end of the bracket when the sign does not change there.
///
/// ```
/// use tailcast::numerics::roots::increasing_root;
/// let root = increasing_root(0.0, 2.0, 1e-12, |x| x * x - 2.0);
/// assert!((root - 2f64.sqrt()).abs() < 1e-12);
/// ```
pub fn increasing_root(low: f64, high: f64, tolerance: f64, mut f: impl FnMut(f64) -> f64) -> f64 {
    let (mut a, mut b) = (low, high);
    let (mut fa, mut fb) = (f(a), f(b));
    if fa >= 0.0 {
        return a;
    }
    if fb <= 0.0 {
        return b;
    }
    for step in 0..BRACKET_MAX_STEPS {
        if b - a <= tolerance {
            break;
        }
        let secant = b - fb * (b - a) / (fb - fa);
        // Every third step bisects, so the bracket shrinks whatever the shape of f.
        let x = if step % 3 == 2 || !(secant > a && secant < b) { 0.5 * (a + b) } else { secant };
        let fx = f(x);
        if fx == 0.0 {
            return x;
        }
        if fx < 0.0 {
            (a, fa) = (x, fx);
            fb *= 0.5;
        } else {
            (b, fb) = (x, fx);
            fa *= 0.5;
        }
    }
    0.5 * (a + b)
}

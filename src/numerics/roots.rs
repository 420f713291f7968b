//! Bracketed root finding.

use super::tolerances::BRACKET_MAX_STEPS;

/// Finds where the increasing function `f` crosses zero in [low, high], to `tolerance` in x.
///
/// Formula: bisection, and inverse quadratic interpolation where three points say that it is safe (Chandrupatla 1997,
/// doi:10.1016/S0965-9978(96)00051-8); at most 200 steps. Returns an end of the bracket when the sign does not change there.
///
/// ```
/// use tailcast::numerics::roots::increasing_root;
/// let root = increasing_root(0.0, 2.0, 1e-12, |x| x * x - 2.0);
/// assert!((root - 2f64.sqrt()).abs() < 1e-12);
/// ```
pub fn increasing_root(low: f64, high: f64, tolerance: f64, mut f: impl FnMut(f64) -> f64) -> f64 {
    let at_low = f(low);
    if at_low >= 0.0 {
        return low;
    }
    let at_high = f(high);
    if at_high <= 0.0 {
        return high;
    }
    // `new` and `across` bracket the root, `new` being the latest; `old` is the point that left the bracket.
    let (mut new, mut across) = ((low, at_low), (high, at_high));
    let mut share = 0.5;
    for _ in 0..BRACKET_MAX_STEPS {
        let x = new.0 + share * (across.0 - new.0);
        let fx = f(x);
        if fx == 0.0 {
            return x;
        }
        let old = if (fx > 0.0) == (new.1 > 0.0) {
            new
        } else {
            let old = across;
            across = new;
            old
        };
        new = (x, fx);
        let width = (across.0 - new.0).abs();
        if width <= tolerance {
            break;
        }
        share = interpolated(old, new, across).unwrap_or(0.5);
        // A step of less than the tolerance closes the bracket from the other side instead.
        let least = 0.5 * tolerance / width;
        share = share.clamp(least, 1.0 - least);
    }
    0.5 * (new.0 + across.0)
}

/// How far from `new` to `across` the inverse parabola through three points comes to zero; none where it may turn in between.
fn interpolated(old: (f64, f64), new: (f64, f64), across: (f64, f64)) -> Option<f64> {
    let place = (new.0 - across.0) / (old.0 - across.0);
    let height = (new.1 - across.1) / (old.1 - across.1);
    let safe = height * height < place && (1.0 - height).powi(2) < 1.0 - place;
    let share = new.1 / (across.1 - new.1) * (old.1 / (across.1 - old.1))
        + (old.0 - new.0) / (across.0 - new.0) * (new.1 / (old.1 - new.1)) * (across.1 / (old.1 - across.1));
    (safe && share.is_finite()).then_some(share)
}

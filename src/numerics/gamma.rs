//! Ratios of gamma functions without the cancellation of two large logarithms.

/// Below this the Stirling series is not used; its first omitted term is then under 10⁻¹⁶.
const STIRLING_FROM: f64 = 30.0;

/// Computes ln Γ(z + n) − ln Γ(z), the logarithm of the rising factorial z(z+1)…(z+n−1), for z > 0 and n ≥ 0.
///
/// # Numerical notes
/// Arguments below 30 are lifted by the recurrence; above, the difference of two Stirling series is written with `ln1p`,
/// so the error is a few units in the last place of n·ln(z + n), not of ln Γ.
///
/// ```
/// use tailcast::numerics::gamma::ln_rising;
/// assert!((ln_rising(1.0, 5.0) - 120f64.ln()).abs() < 1e-14);
/// assert!((ln_rising(1e12, 3.0) - 3.0 * 1e12f64.ln()).abs() < 1e-11);
/// ```
pub fn ln_rising(z: f64, n: f64) -> f64 {
    if n < STIRLING_FROM && n == n.floor() {
        return (0..n as u32).map(|i| (z + f64::from(i)).ln()).sum();
    }
    // `steps` is kept apart from high − low, which would round to the spacing of doubles near a large z.
    let (mut low, mut high, mut steps, mut lifted) = (z, z + n, n, 0.0);
    while low < STIRLING_FROM {
        lifted += low.ln();
        low += 1.0;
        steps -= 1.0;
    }
    while high < STIRLING_FROM {
        lifted -= high.ln();
        high += 1.0;
        steps += 1.0;
    }
    lifted + steps * low.ln() + (high - 0.5) * (steps / low).ln_1p() - steps + stirling_tail(high) - stirling_tail(low)
}

/// 1/(12z) − 1/(360z³) + 1/(1260z⁵) − 1/(1680z⁷), the asymptotic part of ln Γ.
fn stirling_tail(z: f64) -> f64 {
    let square = 1.0 / (z * z);
    (1.0 / 12.0 - square * (1.0 / 360.0 - square * (1.0 / 1260.0 - square / 1680.0))) / z
}

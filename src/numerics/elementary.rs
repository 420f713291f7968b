//! Elementary functions that keep their relative accuracy near zero.

use std::f64::consts::{FRAC_1_SQRT_2, SQRT_2};

use num_complex::Complex64;
use statrs::function::erf::{erfc, erfc_inv};

/// Computes (e^x − 1)/x, with its limit 1 at x = 0.
///
/// # Numerical notes
/// One `expm1`; relative error a few units in the last place for every finite x.
///
/// ```
/// use tailcast::numerics::elementary::exp_m1_ratio;
/// assert_eq!(exp_m1_ratio(0.0), 1.0);
/// assert!((exp_m1_ratio(1.0) - (1f64.exp() - 1.0)).abs() < 1e-15);
/// ```
pub fn exp_m1_ratio(x: f64) -> f64 {
    if x == 0.0 { 1.0 } else { x.exp_m1() / x }
}

/// Computes the principal ln(1 + z), accurate to a few units in the last place relative to |z| when |z| is small.
///
/// # Numerical notes
/// The modulus is taken as ½·ln1p(2·Re z + |z|²), which does not round 1 + z.
///
/// ```
/// use num_complex::Complex64;
/// use tailcast::numerics::elementary::complex_ln_1p;
/// let tiny = Complex64::new(1e-20, 3e-20);
/// assert_eq!(complex_ln_1p(tiny), tiny);
/// ```
pub fn complex_ln_1p(z: Complex64) -> Complex64 {
    let modulus = 0.5 * (z.re * (2.0 + z.re) + z.im * z.im).ln_1p();
    Complex64::new(modulus, z.im.atan2(1.0 + z.re))
}

/// Computes the complex e^z − 1 without rounding away a small z.
///
/// # Numerical notes
/// Re = expm1(x)·cos y − 2 sin²(y/2), Im = e^x·sin y.
///
/// ```
/// use num_complex::Complex64;
/// use tailcast::numerics::elementary::complex_exp_m1;
/// let tiny = Complex64::new(1e-20, 3e-20);
/// assert_eq!(complex_exp_m1(tiny), tiny);
/// ```
pub fn complex_exp_m1(z: Complex64) -> Complex64 {
    let half_sine = (0.5 * z.im).sin();
    let (sine, cosine) = z.im.sin_cos();
    Complex64::new(z.re.exp_m1() * cosine - 2.0 * half_sine * half_sine, z.re.exp() * sine)
}

/// 1/(1 + e^{−x}), the share whose logit is x.
///
/// ```
/// assert_eq!(tailcast::numerics::elementary::logistic(0.0), 0.5);
/// ```
pub fn logistic(x: f64) -> f64 {
    1.0 / (1.0 + (-x).exp())
}

/// Standard normal distribution function Φ(z), as exact as the library's complementary error function: about 10⁻¹¹.
///
/// ```
/// use tailcast::numerics::elementary::{normal_cdf, normal_quantile};
/// // From memory of tables.
/// assert!((normal_cdf(1.96) - 0.9750021048517795).abs() < 1e-10);
/// assert!((normal_quantile(normal_cdf(-3.0)) + 3.0).abs() < 1e-9);
/// ```
pub fn normal_cdf(z: f64) -> f64 {
    0.5 * erfc(-z * FRAC_1_SQRT_2)
}

/// Standard normal quantile; −∞ at 0 and ∞ at 1.
pub fn normal_quantile(probability: f64) -> f64 {
    -SQRT_2 * erfc_inv(2.0 * probability)
}

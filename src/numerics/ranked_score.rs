//! The continuous ranked probability score of a count by two moments.

use std::f64::consts::PI;

use statrs::function::beta::checked_beta_reg;
use statrs::function::gamma::{checked_gamma_lr, ln_gamma};

use super::elementary::normal_cdf;
use super::gamma::ln_rising;
use super::tolerances::{GINI_STEP, SCORE_MAX_TERMS, SCORE_NEGLIGIBLE};
use super::two_moments::TwoMoments;

/// Laws of less variance than this are summed node by node: at most about 6,000 terms, fewer than 1,000 mostly.
const SUMMED_BELOW: f64 = 2_500.0;
/// Shape of the negative binomial below which its closed form is used: so skewed a law is no smooth one near its floor.
const SKEWED_BELOW: f64 = 10.0;
/// Skewness under which a smooth law is a normal one.
const SYMMETRIC: f64 = 1e-6;
/// Shape of a gamma law from which its distribution function is the Wilson–Hilferty approximation, then good to 5·10⁻⁸.
const WILSON_HILFERTY_FROM: f64 = 1e5;

/// Computes the continuous ranked probability score of `law` where `observed` came true, in units of the count; the smaller
/// the better.
///
/// Formula: `∫ (F(t) − 1{t ≥ observed})² dt = E|R − observed| − ½·E|R − R'|`, over all real t. Domain: mean and variance > 0,
/// `observed` any real number. Below a variance of 2,500 the standard deviation should be at most three times the mean or so, as
/// forecast counts have it: more skewed laws reach beyond the sum's cap of 20,000 terms.
///
/// # Numerical notes
/// Three methods, all of bounded cost (at most about 15 µs where measured):
/// - Variance below 2,500: the integral itself, a sum over whole numbers; within 10⁻⁹ of the reference table (relative), means to 10⁷.
/// - Otherwise a gamma law of the same first three moments (Pearson's type III; mirrored where skewness is negative) in closed
///   form, with what its fourth moment and whole numbers change to first order: relative error at most 10⁻⁵ there, falling with
///   the variance.
/// - Negative binomial of shape below 10: the closed form, with ½·E|R − R'| by quadrature of the characteristic function;
///   2·10⁻⁷ at means of 10⁷.
///
/// # References
/// Gneiting & Raftery 2007, eq. 20 and 21, doi:10.1198/016214506000001437; closed forms: Wei & Held 2014,
/// doi:10.1007/s11749-014-0380-8, and Jordan, Krüger & Lerch 2019, doi:10.18637/jss.v090.i12 (there for the gamma law too).
///
/// ```
/// use tailcast::numerics::{ranked_score::ranked_score, two_moments::TwoMoments};
/// // P(0) = e^{-λ}: for a small λ the score of 0 is the sum of squared tails, (1 − e^{-λ})² + …
/// let rare = TwoMoments { mean: 1e-4, variance: 1e-4 };
/// assert!((ranked_score(&rare, 0.0) / 1e-8 - 1.0).abs() < 1e-3);
/// ```
pub fn ranked_score(law: &TwoMoments, observed: f64) -> f64 {
    if law.variance < SUMMED_BELOW {
        return summed(law, observed);
    }
    match Ratios::of(law).shape() {
        Some(shape) if shape < SKEWED_BELOW => skewed(law, shape, observed),
        _ => smooth(law, observed),
    }
}

/// The laws as one family: P(x + 1)/P(x) = (a + b·x)/(x + 1) with r the variance over the mean, a = mean/r and b = 1 − 1/r
/// (Katz 1965; Panjer 1981).
struct Ratios {
    mean: f64,
    /// r − 1; exactly 0 for a Poisson law.
    excess: f64,
}

impl Ratios {
    fn of(law: &TwoMoments) -> Self {
        let excess = if law.is_poisson() { 0.0 } else { (law.variance - law.mean) / law.mean };
        Self { mean: law.mean, excess }
    }

    /// Shape of the negative binomial; `None` for the other laws.
    fn shape(&self) -> Option<f64> {
        (self.excess > 0.0).then(|| self.mean / self.excess)
    }

    /// Trials of the binomial, whole or not; `None` for the other laws.
    fn trials(&self) -> Option<f64> {
        (self.excess < 0.0).then(|| self.mean / -self.excess)
    }

    fn step(&self, x: f64) -> f64 {
        (self.mean + self.excess * x) / ((1.0 + self.excess) * (x + 1.0))
    }

    /// ln P(x), for whole x ≥ 0, at most the trials of a binomial.
    fn ln_probability(&self, x: f64) -> f64 {
        let ln_ratio = self.excess.ln_1p();
        if let Some(shape) = self.shape() {
            // Γ(shape + x)/Γ(x + 1) as one ratio: both are beyond all digits of their difference at large x.
            let ratio = if shape >= 1.0 { ln_rising(x + 1.0, shape - 1.0) } else { -ln_rising(x + shape, 1.0 - shape) };
            let ratio = if x < shape { ln_rising(shape, x) - ln_gamma(x + 1.0) } else { ratio - ln_gamma(shape) };
            ratio - shape * ln_ratio - x * (1.0 / self.excess).ln_1p()
        } else if let Some(trials) = self.trials() {
            let rarer = x.min(trials - x);
            let ways = ln_rising(trials - rarer + 1.0, rarer) - ln_gamma(rarer + 1.0);
            ways + x * (-self.excess).ln() + (trials - x) * ln_ratio
        } else {
            x * self.mean.ln() - self.mean - ln_gamma(x + 1.0)
        }
    }
}

/// The integral as a sum: F is constant from one whole number to the next.
fn summed(law: &TwoMoments, observed: f64) -> f64 {
    let ratios = Ratios::of(law);
    // A binomial with trials that are no whole number keeps the rest of its probability for the next one, as its
    // distribution function does.
    let last = ratios.trials().map_or(f64::INFINITY, |trials| trials.floor());
    let mut x = law.mean.floor().min(last);
    let mut probability = ratios.ln_probability(x).exp();
    let mut terms = 0;
    while x > 0.0 && probability > SCORE_NEGLIGIBLE && terms < SCORE_MAX_TERMS {
        x -= 1.0;
        probability /= ratios.step(x);
        terms += 1;
    }
    // Between `observed` and the support F is 0 or 1, whichever is wrong.
    let mut score = (x - observed).max(0.0);
    let mut below = 0.0;
    let spread = (law.variance / law.mean).max(1.0);
    while x <= last && terms < 2 * SCORE_MAX_TERMS {
        below += probability;
        let share = (observed - x).clamp(0.0, 1.0);
        score += share * below * below + (1.0 - share) * (1.0 - below).powi(2);
        probability *= ratios.step(x);
        x += 1.0;
        terms += 1;
        if x > law.mean && probability * spread < SCORE_NEGLIGIBLE {
            break;
        }
    }
    score + (observed - x).max(0.0)
}

/// E|R − y| − ½·E|R − R'| of a gamma law, shifted and scaled to the law's mean, variance and skewness (2r − 1)/σ.
fn smooth(law: &TwoMoments, observed: f64) -> f64 {
    let deviation = law.variance.sqrt();
    let skewness = (2.0 * (law.variance / law.mean) - 1.0) / deviation;
    let (z, skewness) = ((observed - law.mean) / deviation * 1f64.copysign(skewness), skewness.abs());
    let normal_density = (-0.5 * z * z).exp() / (2.0 * PI).sqrt();
    let (below, flux, gini) = if skewness < SYMMETRIC {
        (normal_cdf(z), normal_density, 1.0 / PI.sqrt())
    } else {
        let shape = 4.0 / (skewness * skewness);
        let scale = 0.5 * skewness;
        // ln of what multiplies both the flux and the Gini mean: Γ(shape + ½)/Γ(shape).
        let rise = ln_rising(shape, 0.5);
        let gini = scale * rise.exp() / PI.sqrt();
        let lift = 0.5 * z * skewness;
        if lift <= -1.0 { (0.0, 0.0, gini) } else { (gamma_below(shape, lift), scale * gamma_flux(shape, lift), gini) }
    };
    // Edgeworth's terms: the sum over whole numbers against the integral, the variance of rounding, and the fourth cumulant,
    // which is smaller than the gamma law's by ½. Together (3/(4√π) − φ(z)(3 + z²))/(24σ²).
    let whole = (0.75 / PI.sqrt() - normal_density * (3.0 + z * z)) / (24.0 * law.variance);
    deviation * (z * (2.0 * below - 1.0) + 2.0 * flux - gini + whole).max(0.0)
}

/// P(G ≤ shape·(1 + lift)) of a gamma law.
fn gamma_below(shape: f64, lift: f64) -> f64 {
    if shape < WILSON_HILFERTY_FROM {
        return checked_gamma_lr(shape, shape * (1.0 + lift)).unwrap_or(0.0);
    }
    let ninth = 1.0 / (9.0 * shape);
    let z = ((lift.ln_1p() / 3.0).exp_m1() + ninth) / ninth.sqrt();
    normal_cdf(z)
}

/// x times the density at x = shape·(1 + lift) of a gamma law: x^shape·e^{−x}/Γ(shape).
fn gamma_flux(shape: f64, lift: f64) -> f64 {
    // shape·ln(shape) − shape − ln Γ(shape) = ½·ln(shape/2π) − 1/(12·shape) + …
    let peak = if shape < WILSON_HILFERTY_FROM {
        shape * shape.ln() - shape - ln_gamma(shape)
    } else {
        0.5 * (shape / (2.0 * PI)).ln() - 1.0 / (12.0 * shape)
    };
    (peak + shape * (lift.ln_1p() - lift)).exp()
}

/// The closed form of a negative binomial.
fn skewed(law: &TwoMoments, shape: f64, observed: f64) -> f64 {
    let ratios = Ratios::of(law);
    let ratio = law.variance / law.mean;
    let gini = half_gini(shape, 4.0 * ratios.excess * ratio);
    if observed < 0.0 {
        return law.mean - observed - gini;
    }
    // Σ_{x ≤ y} (mean − x)·P(x) = r·(y + 1)·P(y + 1).
    let y = observed.floor();
    let below = checked_beta_reg(shape, y + 1.0, 1.0 / ratio).unwrap_or(1.0);
    let flux = ratio * (y + 1.0) * ratios.ln_probability(y + 1.0).exp();
    // Within a unit E|R − y| is linear, its slope 2·F(y) − 1.
    (observed - law.mean) * (2.0 * below - 1.0) + 2.0 * flux - gini
}

/// ½·E|R − R'| of a negative binomial whose R − R' has the characteristic function (1 + c·sin²(θ/2))^{−shape}.
///
/// Formula: |d| is the mean of (1 − cos dθ)/(1 − cos θ) over the circle; with u = tan(θ/2),
/// ½·E|R − R'| = (1/2π)·∫₀^∞ (1 − (1 + c·u²/(1 + u²))^{−shape})/u² du, taken by the trapezoid rule in ln u, whose error falls
/// as e^{−π²/step}.
fn half_gini(shape: f64, c: f64) -> f64 {
    // Below the range the integrand is about 2·variance, above it less than 1/u².
    const REACH: f64 = 24.0;
    let lowest = -0.5 * (1.0 + c * (1.0 + shape)).ln() - REACH;
    let steps = ((REACH - lowest) / GINI_STEP).ceil();
    let term = |i: f64| {
        let log = lowest + GINI_STEP * i;
        let square = (2.0 * log).exp();
        -(-shape * (c * square / (1.0 + square)).ln_1p()).exp_m1() * (-log).exp()
    };
    let sum: f64 = (0..=steps as u32).map(|i| term(f64::from(i))).sum();
    GINI_STEP * sum / (2.0 * PI)
}

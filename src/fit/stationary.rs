//! The degree law of a network that always grew in proportion.

use crate::model::{AttachmentMix, EntryDegrees};
use crate::numerics::gamma::ln_rising;

/// Below this β the law is geometric to double precision over every degree that has any mass.
const GEOMETRIC_BELOW: f64 = 1e-12;

/// The stationary degree law under constant arrivals, mix and links per arrival.
///
/// Formula, with α = ℓ(1−p), β = ℓp/κ̄ and κ̄ = ℓ + ē: `P_k·(1 + α + βk) = (α + β(k−1))·P_{k−1} + e_k`. For one entry degree
/// it is a Waring law with pmf exponent 1 + 1/β (Price 1976; Dorogovtsev, Mendes & Samukhin 2000), for p = 0 a
/// geometric law; for p = 1 and total degree it is `2m(m+1)/(k(k+1)(k+2))` (Krapivsky, Redner & Leyvraz 2000).
///
/// # Numerical notes
/// Products of ratios are taken as differences of log rising factorials. ln P is good to about 10⁻¹³ relative, checked
/// to degrees of 10⁷ against mpmath (`tests/core/stationary.rs`). Cost: distinct degrees plus entry degrees.
///
/// ```
/// use tailcast::fit::StationaryLaw;
/// use tailcast::model::{AttachmentMix, EntryDegrees};
/// let law = StationaryLaw::new(AttachmentMix::PREFERENTIAL, 2.0, EntryDegrees::single(2));
/// let [at_two, at_five] = law.log_pmf(&[2, 5])[..] else { unreachable!() };
/// assert!((at_two.exp() - 12.0 / 24.0).abs() < 1e-14);
/// assert!((at_five.exp() - 12.0 / 210.0).abs() < 1e-14);
/// ```
#[derive(Debug, Clone, PartialEq)]
pub struct StationaryLaw {
    alpha: f64,
    beta: f64,
    entry: EntryDegrees,
}

impl StationaryLaw {
    /// The law of a network with mix p, ℓ = `links_per_arrival` > 0 and these entry degrees.
    pub fn new(mix: AttachmentMix, links_per_arrival: f64, entry: EntryDegrees) -> Self {
        let p = mix.preferential_share();
        let mean_degree = links_per_arrival + entry.mean();
        Self { alpha: links_per_arrival * (1.0 - p), beta: links_per_arrival * p / mean_degree, entry }
    }

    /// Gain rate of a node of degree k per unit of ln N: α + βk.
    pub fn gain(&self, degree: f64) -> f64 {
        self.alpha + self.beta * degree
    }

    /// ln P_k at ascending `degrees`; −∞ below the smallest entry degree.
    pub fn log_pmf(&self, degrees: &[u64]) -> Vec<f64> {
        let mut logs = self.log_pmf_from_below();
        degrees.iter().map(|&degree| logs.at(degree as f64)).collect()
    }

    /// ln P_k, continued to degrees that are no whole numbers above the largest entry degree: ask in ascending order.
    pub(super) fn log_pmf_from_below(&self) -> LogPmf<'_> {
        LogPmf { law: self, entries: self.entry.shares(), carried: None, last: None }
    }

    /// Tail P(degree ≥ k) at ascending `degrees`, from the balance of flows: `(α + β(k−1))·P_{k−1} + Σ_{m≥k} e_m`.
    pub fn tail(&self, degrees: &[u64]) -> Vec<f64> {
        let below: Vec<u64> = degrees.iter().map(|&k| k.saturating_sub(1)).collect();
        let logs = self.log_pmf(&below);
        let crossing = |(&degree, log): (&u64, f64)| match degree {
            0 => 1.0,
            _ => {
                let entering: f64 =
                    self.entry.shares().iter().filter(|&&(m, _)| m >= degree).map(|&(_, share)| share).sum();
                self.gain((degree - 1) as f64) * log.exp() + entering
            }
        };
        degrees.iter().zip(logs).map(crossing).collect()
    }

    /// ln of P_to/P_from without entries in between: Σ ln((α + β(i−1))/(1 + α + βi)) over from < i ≤ to; `last` is the rising factorial
    /// that the one before ended with, under its argument.
    fn log_ratio(&self, from: f64, to: f64, last: &mut Option<(f64, f64)>) -> f64 {
        let steps = to - from;
        if steps == 0.0 {
            return 0.0;
        }
        if self.beta < GEOMETRIC_BELOW {
            return steps * (self.alpha / (1.0 + self.alpha)).ln();
        }
        let (a, b) = (self.alpha / self.beta, (1.0 + self.alpha) / self.beta);
        if from == 0.0 && a == 0.0 {
            return f64::NEG_INFINITY; // p = 1: a node without links never gains one
        }
        if steps == 1.0 {
            return (-(1.0 + self.beta) / (1.0 + self.gain(to))).ln_1p();
        }
        // Γ(to+a)·Γ(from+a+δ) / (Γ(from+a)·Γ(to+a+δ)) with δ = 1 + b − a, in whichever form has the smaller logarithms.
        let (low, high, shift) = (from + a, to + a, 1.0 + 1.0 / self.beta);
        if shift < steps {
            // What the last step ended with, this one starts with.
            let started = last.filter(|last| last.0 == low).map_or_else(|| ln_rising(low, shift), |last| last.1);
            let ended = ln_rising(high, shift);
            *last = Some((high, ended));
            started - ended
        } else {
            ln_rising(low, steps) - ln_rising(from + 1.0 + b, steps)
        }
    }
}

/// ln P_k of one degree after the other.
pub(super) struct LogPmf<'a> {
    law: &'a StationaryLaw,
    /// Entry degrees that have not been passed.
    entries: &'a [(u64, f64)],
    /// The degree last reached and its ln P.
    carried: Option<(f64, f64)>,
    /// See [`StationaryLaw::log_ratio`].
    last: Option<(f64, f64)>,
}

impl LogPmf<'_> {
    /// ln P at `degree`, which is not below the last one asked for.
    pub fn at(&mut self, degree: f64) -> f64 {
        while let [(entry, share), rest @ ..] = self.entries
            && *entry as f64 <= degree
        {
            let entry = *entry as f64;
            // e_m/(1 + α + βm) joins what the growth law carried up to m.
            let joining = share.ln() - (1.0 + self.law.gain(entry)).ln();
            let so_far = self.carry(entry);
            let (large, small) = (joining.max(so_far), joining.min(so_far));
            self.carried = Some((entry, large + (small - large).exp().ln_1p()));
            self.entries = rest;
        }
        let log = self.carry(degree);
        self.carried = self.carried.map(|_| (degree, log));
        log
    }

    fn carry(&mut self, to: f64) -> f64 {
        self.carried.map_or(f64::NEG_INFINITY, |(from, log)| log + self.law.log_ratio(from, to, &mut self.last))
    }
}

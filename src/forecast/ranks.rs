//! The law of the r-th largest degree.

use super::ForecastError;
use crate::growth::{Course, GrowthError, NetworkLaw, NodeLaw, TailParts};
use crate::model::{DegreeCounts, MAX_DEGREE};
use crate::numerics::tolerances::Accuracy;

/// The largest nodes of today whose own laws are met by degrees of their own.
const FOLLOWED: usize = 12;
/// Where about a followed node's mean, in standard deviations.
const ABOUT: [f64; 9] = [-4.0, -2.5, -1.5, -0.75, 0.0, 0.75, 1.5, 2.5, 4.0];
/// Degrees evenly spread over the logarithm besides.
const SPREAD: u32 = 48;
/// A probability below this is none.
const NOBODY: f64 = 1e-7;
/// A term of a count's law below this adds nothing.
const NEGLIGIBLE_TERM: f64 = 1e-18;

/// The law of the degree of the node of each rank, 1 the largest, at one day.
///
/// Formula: P(D_r ≥ x) = P(S_x ≥ r), S_x a sum of independent binomial counts, one a degree of today, and a Poisson number of
/// newcomers: convolved exactly up to the highest rank.
///
/// # Numerical notes
/// Tabulated at about 150 degrees: about the largest nodes' means, and evenly in the logarithm; linear between. Cost: as many tails,
/// whatever the number of ranks.
pub struct RankLaw {
    degrees: Vec<f64>,
    /// P(D_r ≥ x): one list a degree, one probability a rank.
    at_least: Vec<Vec<f64>>,
}

impl RankLaw {
    /// The law at `day` of a course from `counts`, for ranks up to `ranks`; `cancelled` is asked between tails.
    ///
    /// # Errors
    /// When a tail cannot be computed; cancellation.
    pub fn new(
        course: &Course,
        counts: &DegreeCounts,
        day: f64,
        ranks: usize,
        cancelled: &dyn Fn() -> bool,
    ) -> Result<Self, ForecastError> {
        let law = NetworkLaw::at(course, counts, day)?.until(cancelled);
        let at = |degree: f64| -> Result<Vec<f64>, GrowthError> {
            Ok(at_least(&law.parts(degree.max(1.0) as u64, Accuracy::Working)?, ranks))
        };
        let certain = |probabilities: &[f64]| probabilities.last().is_none_or(|&p| p > 1.0 - NOBODY);
        let none = |probabilities: &[f64]| probabilities.first().is_none_or(|&p| p < NOBODY);
        let mut low: f64 = counts.degree_of_rank(ranks as u64).map_or(0.0, |degree| degree as f64);
        while low >= 1.0 && !certain(&at(low)?) {
            low = (0.5_f64 * low).floor();
        }
        let mut high = 2.0 * (counts.largest() as f64).max(4.0);
        while high < MAX_DEGREE as f64 && !none(&at(high)?) {
            high *= 2.0;
        }
        let node = NodeLaw::between(course, 0.0, day);
        let mut degrees = vec![low, high];
        for degree in counts.degrees().iter().rev().take(FOLLOWED.min(ranks)) {
            let (mean, deviation) = (node.mean(*degree), node.variance(*degree).sqrt());
            degrees.extend(ABOUT.map(|about| (mean + about * deviation).round()));
            degrees.extend([*degree as f64, *degree as f64 + 1.0]);
        }
        let step = (high.ln_1p() - low.ln_1p()) / f64::from(SPREAD);
        degrees.extend((1..SPREAD).map(|i| (low.ln_1p() + step * f64::from(i)).exp_m1().round()));
        degrees.retain(|&degree| degree >= low && degree <= high);
        degrees.sort_by(f64::total_cmp);
        degrees.dedup();
        let mut table = Vec::with_capacity(degrees.len());
        for &degree in &degrees {
            if cancelled() {
                return Err(ForecastError::Cancelled);
            }
            // Everybody has at least 0 links; but a rank beyond the nodes there are is nobody's.
            table.push(if degree < 1.0 { vec![1.0; ranks] } else { at(degree)? });
        }
        Ok(Self { degrees, at_least: table })
    }

    /// Expected degree of the node of a rank.
    ///
    /// Formula: Σ_{x ≥ 1} P(D_r ≥ x), by the trapezoid rule between the degrees of the table.
    pub fn expected(&self, rank: usize) -> f64 {
        let first = self.degrees.first().copied().unwrap_or(0.0);
        let mut sum = first * self.probability(0, rank);
        for i in 1..self.degrees.len() {
            let (a, b) = (self.probability(i - 1, rank), self.probability(i, rank));
            // Σ over the whole numbers of (from, to] of a line from a to b.
            let steps = self.degrees[i] - self.degrees[i - 1];
            sum += 0.5 * (a + b) * steps - 0.5 * (a - b);
        }
        sum
    }

    /// Smallest x with P(D_r ≤ x) ≥ `probability`, as the table tells it.
    pub fn quantile(&self, rank: usize, probability: f64) -> f64 {
        let wanted = 1.0 - probability;
        let Some(past) = (0..self.degrees.len()).find(|&i| self.probability(i, rank) <= wanted) else {
            return self.degrees.last().copied().unwrap_or(0.0);
        };
        let Some(before) = past.checked_sub(1) else { return self.degrees[past] };
        let (a, b) = (self.probability(before, rank), self.probability(past, rank));
        let part = if a > b { (a - wanted) / (a - b) } else { 0.0 };
        let crossing = self.degrees[before] + part * (self.degrees[past] - self.degrees[before]);
        (crossing - 0.5).round().max(self.degrees[before])
    }

    fn probability(&self, i: usize, rank: usize) -> f64 {
        rank.checked_sub(1).and_then(|r| self.at_least.get(i)?.get(r)).copied().unwrap_or(0.0)
    }
}

/// P(S ≥ r) for r = 1 to `ranks`.
fn at_least(parts: &TailParts, ranks: usize) -> Vec<f64> {
    // P(S = 0), …, P(S = ranks − 1)
    let mut law = vec![0.0; ranks];
    let mut term = (-parts.newcomers).exp();
    for (i, own) in law.iter_mut().enumerate() {
        *own = term;
        term *= parts.newcomers / (i + 1) as f64;
    }
    for class in &parts.present {
        convolve(&mut law, class.nodes, class.probability);
    }
    let mut below = 0.0;
    law.iter()
        .map(|p| {
            below += p;
            (1.0 - below).clamp(0.0, 1.0)
        })
        .collect()
}

/// Adds a binomial count to a law of counts, of which only the first terms are kept.
fn convolve(law: &mut [f64], nodes: f64, probability: f64) {
    let mut terms = Vec::new();
    if probability >= 1.0 {
        terms.resize((nodes as usize).min(law.len()), 0.0);
        terms.push(1.0);
    } else {
        let odds = probability / (1.0 - probability);
        // In logarithms: the first term of many nodes that are nearly certain is far below any double.
        let mut log_term = nodes * (-probability).ln_1p();
        for i in 0..law.len() {
            terms.push(log_term.exp());
            log_term += ((nodes - i as f64).max(0.0) / (i + 1) as f64 * odds).ln();
            if log_term < NEGLIGIBLE_TERM.ln() && i as f64 >= nodes * probability {
                break;
            }
        }
    }
    for i in (0..law.len()).rev() {
        law[i] = terms.iter().take(i + 1).enumerate().map(|(j, term)| term * law[i - j]).sum();
    }
}

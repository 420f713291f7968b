//! Tail sizes: how many nodes will have at least a threshold of links.

use super::law::NodeLaw;
use super::mean_field::{Course, GrowthError};
use crate::model::DegreeCounts;
use crate::numerics::quadrature::integrate_adaptively;
use crate::numerics::tolerances::{Accuracy, TAIL_ZERO};

/// The tail size S_j at a date, as far as the growth law determines it: a Poisson-binomial count over the present nodes
/// plus a Poisson count over newcomers.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct TailSum {
    /// Nodes in the tail at the start that are expected to be in it still: all of them without losses.
    pub kept: f64,
    /// Expected tail size.
    pub mean: f64,
    /// Its sampling variance, given the parameters.
    pub variance: f64,
    /// ln of the probability that no node at all is in the tail.
    pub log_none: f64,
}

/// Computes the tail size S_j at `day` for the network with `counts` at day 0 of `course`.
///
/// Formula: `S_j = Σ_k n_k·D·P(k → ≥ j) + ∫₀ᵗ A(s)·D(s,t)·Σ_k e_k·P_{s→t}(k → ≥ j) ds`
///
/// # Numerical notes
/// Cost follows the distinct degrees that can matter: a node with more links is the likelier to reach the threshold
/// (stochastic order of the linear birth–death process), so the sum runs down from the threshold and stops once all nodes
/// below could add less than a negligible share of it (10⁻¹³ at full accuracy). The newcomers' integral is adaptive to 10⁻⁹ of
/// the whole.
///
/// # Errors
/// Those of [`NodeLaw::tail`].
pub fn tail_sum(
    course: &Course,
    counts: &DegreeCounts,
    day: f64,
    threshold: u64,
    accuracy: Accuracy,
) -> Result<TailSum, GrowthError> {
    let law = NodeLaw::between(course, 0.0, day);
    let mut sum = present_sum(course, &law, counts, day, threshold, accuracy)?;
    let newcomers = newcomers_mean(course, &law, day, threshold, accuracy, sum.mean)?;
    sum.mean += newcomers;
    sum.variance += newcomers;
    sum.log_none -= newcomers;
    Ok(sum)
}

fn present_sum(
    course: &Course,
    law: &NodeLaw,
    counts: &DegreeCounts,
    day: f64,
    threshold: u64,
    accuracy: Accuracy,
) -> Result<TailSum, GrowthError> {
    let survival = course.survival(day);
    let mut sum = TailSum::default();
    let mut below = counts.nodes();
    for (degree, nodes) in counts.iter().rev() {
        let probability = survival * law.tail_within(degree, threshold, accuracy)?;
        if probability * below as f64 <= accuracy.negligible() * sum.mean + TAIL_ZERO {
            break;
        }
        below -= nodes;
        let nodes = nodes as f64;
        sum.mean += nodes * probability;
        sum.variance += nodes * probability * (1.0 - probability);
        sum.log_none += nodes * (-probability).ln_1p();
        if degree >= threshold {
            sum.kept += nodes * probability;
        }
    }
    Ok(sum)
}

fn newcomers_mean(
    course: &Course,
    law: &NodeLaw,
    day: f64,
    threshold: u64,
    accuracy: Accuracy,
    present: f64,
) -> Result<f64, GrowthError> {
    let parameters = course.parameters();
    let arrivals = parameters.arrivals.arrivals_between(0.0, day);
    let entry = parameters.entry.shares();
    // The earliest newcomers bound the later ones, as long as links are not lost.
    let bound = arrivals * law.mixture_tail(entry, threshold, accuracy)?;
    if arrivals == 0.0 || (!parameters.has_losses() && bound <= accuracy.negligible() * present + TAIL_ZERO) {
        return Ok(0.0);
    }
    let mut in_tail = |arrival: f64| -> Result<f64, GrowthError> {
        let law = NodeLaw::between(course, arrival, day);
        let share = law.mixture_tail(entry, threshold, accuracy)?;
        Ok(parameters.arrivals.rate(arrival) * course.survival(day - arrival) * share)
    };
    let mut mean = 0.0;
    for pair in course.arrival_edges(day).windows(2) {
        mean += integrate_adaptively(pair[0], pair[1], present + mean, accuracy, &mut in_tail)?;
    }
    Ok(mean)
}

//! Nodes under a degree cap that may lose links again: no closed law, but a backward equation on few states.

use super::law::NodeLaw;
use super::mean_field::{Course, GrowthError};
use super::tails::{TailClass, TailParts};
use crate::model::DegreeCounts;
use crate::numerics::tolerances::{Accuracy, CAP_DAMPING_STEPS, CAP_TIME_STEPS};

/// Largest cap whose states are gone through one by one; above it the cap's edge is narrow beside the degree.
const MOST_STATES: u64 = 2_000;

/// Whether the tail past `threshold` under the course's cap needs the backward equation: links can be lost at the cap, and gained
/// again.
pub(super) fn needs_states(course: &Course, threshold: u64) -> bool {
    let lost = course.parameters().end_loss_hazard() > 0.0;
    course.cap().is_some_and(|cap| lost && threshold <= cap && cap <= MOST_STATES)
}

/// Whom the tail past `threshold` (at most the cap) is made of at `day`.
///
/// Formula (Kolmogorov's backward equation), with u_k(s) = P(X_t ≥ j | X_s = k) for k up to the cap and to the largest degree of today:
/// `−du_k/ds = λ_k(s)·(u_{k+1} − u_k) + w·k·(u_{k−1} − u_k)`, λ_k = 0 from the cap on, u_k(t) = 1 for k ≥ j and 0 below. One solution gives every
/// present node (s = 0) and newcomers of every day. Of a node that starts past the states, that it may fall below the cap and gain again
/// is left out.
///
/// # Numerical notes
/// Crank–Nicolson in 240 steps that shorten towards t, the first four from there by backward Euler (Rannacher 1984, from memory),
/// tridiagonal solves; against simulation within its error (`tests/core/questions/scenarios.rs`). Cost: cap × steps.
pub(super) fn capped_parts(
    course: &Course,
    counts: &DegreeCounts,
    day: f64,
    threshold: u64,
    cap: u64,
) -> Result<TailParts, GrowthError> {
    let forces = course.parameters();
    let states = cap.max(counts.largest()).min(MOST_STATES) as usize + 1;
    let mut values: Vec<f64> = (0..states).map(|k| f64::from(k as u64 >= threshold)).collect();
    let entering = |values: &[f64]| -> f64 {
        forces.entry.shares().iter().map(|&(k, share)| share * values[(k as usize).min(states - 1)]).sum()
    };
    let mut newcomers = 0.0;
    let at = |step: usize| day * (1.0 - (step as f64 / CAP_TIME_STEPS as f64).powi(2));
    let mut system = Tridiagonal::new(states);
    for step in 0..CAP_TIME_STEPS {
        let (from, to) = (at(step), at(step + 1));
        let before = entering(&values);
        let hazards = course.hazards(0.5 * (from + to), 1.0);
        let implicit = if step < CAP_DAMPING_STEPS { 1.0 } else { 0.5 };
        let gain = |k: usize| if (k as u64) < cap { hazards.uniform + hazards.preferential * k as f64 } else { 0.0 };
        system.step(&mut values, from - to, implicit, gain, |k| forces.end_loss_hazard() * k as f64);
        let arrived = forces.arrivals.arrivals_between(to, from) * course.survival(day - 0.5 * (from + to));
        newcomers += arrived * 0.5 * (before + entering(&values));
    }
    let survival = course.survival(day);
    let gainless = NodeLaw::gainless(course, 0.0, day);
    let class = |(degree, nodes): (u64, u64)| {
        let tail = match values.get(degree as usize) {
            Some(value) => value.clamp(0.0, 1.0),
            None => gainless.tail_within(degree, threshold, Accuracy::Working)?,
        };
        Ok(TailClass { degree, nodes: nodes as f64, probability: survival * tail })
    };
    Ok(TailParts { present: counts.iter().rev().map(class).collect::<Result<_, GrowthError>>()?, newcomers })
}

/// Room for the steps of one birth and death equation.
struct Tridiagonal {
    upper: Vec<f64>,
    right: Vec<f64>,
}

impl Tridiagonal {
    fn new(states: usize) -> Self {
        Self { upper: vec![0.0; states], right: vec![0.0; states] }
    }

    /// (1 − θh·G)·new = (1 + (1 − θ)h·G)·old by elimination (Thomas), G the generator with the given gains and losses.
    fn step(
        &mut self,
        values: &mut [f64],
        days: f64,
        implicit: f64,
        gain: impl Fn(usize) -> f64,
        loss: impl Fn(usize) -> f64,
    ) {
        let last = values.len() - 1;
        for k in 0..=last {
            let (up, down) = (days * gain(k), days * loss(k));
            let above = if k < last { values[k + 1] } else { values[k] };
            let below = if k > 0 { values[k - 1] } else { values[k] };
            let explicit = up * (above - values[k]) + down * (below - values[k]);
            let known = values[k] + (1.0 - implicit) * explicit;
            let (lower, upper) = (-implicit * down, -implicit * up);
            let diagonal = 1.0 - lower - upper;
            let (before_upper, before_right) = if k > 0 { (self.upper[k - 1], self.right[k - 1]) } else { (0.0, 0.0) };
            let pivot = diagonal - lower * before_upper;
            self.upper[k] = upper / pivot;
            self.right[k] = (known - lower * before_right) / pivot;
        }
        values[last] = self.right[last];
        for k in (0..last).rev() {
            values[k] = self.right[k] - self.upper[k] * values[k + 1];
        }
    }
}

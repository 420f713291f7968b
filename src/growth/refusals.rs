//! Links that a degree cap refuses along a course.

use super::mean_field::{Course, GrowthError};
use super::tails::NetworkLaw;
use crate::model::{DegreeCounts, RefusedLinks};
use crate::numerics::tolerances::{Accuracy, CAP_AGREEMENT, CAP_MAX_ROUNDS};

/// Days at which the refused share is worked out; it bends most at the start, and so do their places.
const POINTS: usize = 24;
/// The refused share is at most this: where every node is full, the last free places are sought for ever.
const MOST_REFUSED: f64 = 0.999;

/// The share of landing ends that pick a node at the cap, and what of them has been lost.
///
/// Formula: R = (1−p)·F/N + p·K_F/K, F the nodes with `cap` links or more and K_F their link ends. Lost ends: K falls behind by Q,
/// Q' = L·R − θ·Q. Spread ends pick again until they find a node below the cap: hazards there are 1/(1−R) times as large.
///
/// # Numerical notes
/// Fixed-point rounds over the whole course, until R moves by less than 10⁻⁶; linear between 24 days.
#[derive(Debug, Clone, Default)]
pub(super) struct Refusals {
    days: Vec<f64>,
    share: Vec<f64>,
    lost: Vec<f64>,
    spread: bool,
}

impl Refusals {
    /// Those of a course from `counts` on; none without a cap.
    pub fn along(course: &Course, counts: &DegreeCounts) -> Result<Self, GrowthError> {
        let Some(cap) = course.parameters().degree_cap else { return Ok(Self::default()) };
        let horizon = course.horizon();
        let days: Vec<f64> = (0..=POINTS).map(|i| horizon * (i as f64 / POINTS as f64).powi(2)).collect();
        let zeros = vec![0.0; days.len()];
        let spread = cap.refused() == RefusedLinks::Spread;
        let mut found = Self { share: zeros.clone(), lost: zeros, days, spread };
        for _ in 0..CAP_MAX_ROUNDS {
            let trial = course.clone().with_refusals(found.clone());
            let share = found.days.iter().map(|&day| refused_share(&trial, counts, cap.links(), day));
            let share = share.collect::<Result<Vec<f64>, GrowthError>>()?;
            let moved = share.iter().zip(&found.share).map(|(new, old)| (new - old).abs()).fold(0.0, f64::max);
            found.share = share;
            found.add_up(course);
            if moved < CAP_AGREEMENT {
                return Ok(found);
            }
        }
        Err(GrowthError::CapUnsettled)
    }

    /// Lost ends so far, by the trapezoid rule with exact decay within each stretch.
    fn add_up(&mut self, course: &Course) {
        if self.spread {
            return;
        }
        let theta = course.degree_loss();
        let flow = |i: usize| {
            let day = self.days[i];
            self.share[i] * course.landing(day, course.nodes(day))
        };
        let mut lost = vec![0.0];
        for i in 1..self.days.len() {
            let days = self.days[i] - self.days[i - 1];
            let decay = (-theta * days).exp();
            lost.push(lost[i - 1] * decay + 0.5 * days * (flow(i - 1) * decay + flow(i)));
        }
        self.lost = lost;
    }

    /// Link ends that K has fallen behind by.
    pub fn lost_by(&self, day: f64) -> f64 {
        self.at(&self.lost, day)
    }

    /// Factor on the hazards of nodes below the cap.
    pub fn boost(&self, day: f64) -> f64 {
        if self.spread { (1.0 - self.at(&self.share, day)).recip() } else { 1.0 }
    }

    fn at(&self, values: &[f64], day: f64) -> f64 {
        let after = self.days.partition_point(|&d| d <= day);
        match (after.checked_sub(1), self.days.get(after)) {
            (Some(i), Some(next)) => {
                values[i] + (values[after] - values[i]) * (day - self.days[i]) / (next - self.days[i])
            }
            _ => values.last().copied().unwrap_or(0.0),
        }
    }
}

fn refused_share(course: &Course, counts: &DegreeCounts, cap: u64, day: f64) -> Result<f64, GrowthError> {
    let (nodes, link_ends) = (course.nodes(day), course.link_ends(day));
    let full = NetworkLaw::at(course, counts, day)?.tail(cap, Accuracy::Working)?.mean;
    // Ends of today's nodes past the cap are more than `cap` each, as far as these links last.
    let lasting = (-course.parameters().end_loss_hazard() * day).exp();
    let past = |(k, n): (u64, u64)| (k as f64 * lasting - cap as f64).max(0.0) * n as f64;
    let full_ends = cap as f64 * full + counts.iter().map(past).sum::<f64>() * course.survival(day);
    let p = course.parameters().mix.preferential_share();
    let by_degree = if link_ends > 0.0 { p * full_ends / link_ends } else { 0.0 };
    Ok(((1.0 - p) * full / nodes.max(f64::MIN_POSITIVE) + by_degree).clamp(0.0, MOST_REFUSED))
}

//! The law of a node drawn from a network whose nodes differ: dormant or active, slow or fast.

use super::classes::ClassTails;
use super::{NodeLaw, SteadyLaw};
use crate::growth::mean_field::{Course, GrowthError};
use crate::numerics::quadrature::PANEL;
use crate::numerics::tolerances::Accuracy;
use crate::numerics::two_moments::TwoMoments;

/// The tails of nodes of one class after the other.
pub(crate) struct MixedTails<'a> {
    parts: Vec<(f64, ClassTails<'a>)>,
}

impl MixedTails<'_> {
    /// Probability that a node of degree `degree` has at least the threshold at the end, given that it stays.
    pub fn of(&mut self, degree: u64) -> Result<f64, GrowthError> {
        self.parts.iter_mut().map(|(share, tails)| Ok(*share * tails.of(degree)?)).sum()
    }
}

/// A mixture of node laws, over growth factors and over the day at which a node falls dormant.
///
/// # Numerical notes
/// The day of falling dormant is integrated with 10 Gauss–Legendre nodes. Without dormancy and growth variance there is
/// one law, and nothing is lost.
#[derive(Debug, Clone)]
pub(crate) struct MixedLaw {
    /// Shares, adding up to one, with their laws.
    parts: Vec<(f64, NodeLaw)>,
}

impl MixedLaw {
    /// Of a node present at day 0, of whom a share is dormant already.
    pub fn of_present(course: &Course, day: f64) -> Self {
        Self::of_present_growing(course, 1.0, day)
    }

    /// The same of a node whose hazard is `factor` times that of its kind.
    pub fn of_present_growing(course: &Course, factor: f64, day: f64) -> Self {
        let dormant = course.parameters().dormant_share();
        let mut law = Self::of_active(course, factor, 0.0, day, 1.0 - dormant);
        if dormant > 0.0 {
            law.parts.push((dormant, NodeLaw::of_group(course, 0.0, 0.0, 0.0, day)));
        }
        law
    }

    /// Of a node that arrives, active, at day `from`.
    pub fn of_newcomer(course: &Course, from: f64, to: f64) -> Self {
        Self::of_active(course, 1.0, from, to, 1.0)
    }

    fn of_active(course: &Course, factor: f64, from: f64, to: f64, share: f64) -> Self {
        let still_active = course.still_active(from, to);
        let mut stretches = vec![(still_active, to)];
        if still_active < 1.0 {
            // The hazard of falling dormant is that of arriving, κ·A/N.
            let forces = course.parameters();
            let falls =
                |day: f64| course.still_active(from, day) * forces.arrivals.rate(day) / course.nodes(day) * (to - from);
            let days = PANEL.nodes.map(|x| from + (to - from) * x);
            let weights: Vec<f64> = days.iter().zip(&PANEL.weights).map(|(&day, w)| w * falls(day)).collect();
            let total: f64 = weights.iter().sum();
            let scale = if total > 0.0 { (1.0 - still_active) / total } else { 0.0 };
            stretches.extend(weights.iter().zip(days).map(|(w, day)| (w * scale, day)));
        }
        let mut parts = Vec::with_capacity(stretches.len() * course.growth_factors().len());
        for group in course.growth_factors() {
            for &(weight, until) in &stretches {
                let law = NodeLaw::of_group(course, factor * group.factor, from, until, to);
                parts.push((share * weight * group.share, law));
            }
        }
        Self { parts }
    }

    /// Probability that a node with degree drawn from `starts` has at least `threshold` links at the end, given that it stays.
    pub fn tail(&self, starts: &[(u64, f64)], threshold: u64, accuracy: Accuracy) -> Result<f64, GrowthError> {
        if let [(_, only)] = self.parts.as_slice() {
            return only.mixture_tail(starts, threshold, accuracy);
        }
        let tail = |(share, law): &(f64, NodeLaw)| Ok(share * law.mixture_tail(starts, threshold, accuracy)?);
        self.parts.iter().map(tail).sum()
    }

    /// [`Self::tail`] of one starting degree after the other.
    pub fn class_tails(&self, threshold: u64, accuracy: Accuracy) -> MixedTails<'_> {
        let parts = self.parts.iter().map(|(share, law)| (*share, ClassTails::new(law, threshold, accuracy)));
        MixedTails { parts: parts.collect() }
    }

    /// The closed form, where all nodes have one law and it has one.
    pub fn steady(&self) -> Option<SteadyLaw> {
        match self.parts.as_slice() {
            [(_, only)] => only.steady(),
            _ => None,
        }
    }

    /// Whether [`Self::rough_tail`] is cheaper than [`Self::tail`].
    pub fn is_mixed(&self) -> bool {
        self.parts.len() > 1
    }

    /// [`Self::tail`] with each part's law fitted to its mean and variance: ten times as fast, and good to a few per cent, to
    /// a factor of two in far tails.
    pub fn rough_tail(&self, starts: &[(u64, f64)], threshold: u64) -> f64 {
        let of_start = |law: &NodeLaw, degree: u64| {
            let floor = if law.can_fall() { 0 } else { degree };
            let law = TwoMoments { mean: law.mean(degree) - floor as f64, variance: law.variance(degree) };
            match threshold.checked_sub(floor) {
                None | Some(0) => 1.0,
                Some(_) if law.mean <= 0.0 || law.variance <= 0.0 => f64::from(degree >= threshold),
                Some(wanted) => law.above(wanted as f64 - 1.0),
            }
        };
        let of_part = |(share, law): &(f64, NodeLaw)| -> f64 {
            share * starts.iter().map(|&(degree, weight)| weight * of_start(law, degree)).sum::<f64>()
        };
        self.parts.iter().map(of_part).sum()
    }

    /// Mean and variance of the degree at the end of a node of degree `degree` at the start.
    pub fn moments(&self, degree: u64) -> (f64, f64) {
        let (mut mean, mut square) = (0.0, 0.0);
        for (share, law) in &self.parts {
            let own = law.mean(degree);
            mean += share * own;
            square += share * (law.variance(degree) + own * own);
        }
        (mean, (square - mean * mean).max(0.0))
    }

    /// P(X ≥ j), E[X; X ≥ j] and E[X²; X ≥ j] of a node that starts with `degree` links, given that it stays: each part's law by its
    /// first two moments.
    pub fn moments_above(&self, degree: u64, threshold: u64) -> [f64; 3] {
        let mut sum = [0.0; 3];
        for (share, law) in &self.parts {
            let own = law.moments_above(degree, threshold);
            sum.iter_mut().zip(own).for_each(|(sum, own)| *sum += share * own);
        }
        sum
    }
}

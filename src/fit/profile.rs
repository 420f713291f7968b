//! Profile likelihood of the preferential share on [0, 1], boundaries included.

use std::cell::Cell;

use statrs::distribution::{ChiSquared, ContinuousCDF};

use super::{Candidate, FitError, Model, ModelChoice};
use crate::model::{Estimate, Interval};
use crate::numerics::optimise::minimise;
use crate::numerics::roots::increasing_root;

/// Level of the intervals that come with every fitted estimate.
pub(super) const ESTIMATE_LEVEL: f64 = 0.9;
/// Standard normal quantile at 0.95: the ends of a 90 % interval.
pub(super) const NORMAL_95: f64 = 1.644_853_626_951_472_2;
/// Each period weighs this much of the next newer one: the mix may move, and the forecast wants today's.
pub(super) const AGE_WEIGHT: f64 = 0.7;

/// The likelihood of the preferential share, maximised and bounded.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Profile {
    pub model: Model,
    pub share: Estimate,
    /// Where the scaled log-likelihood has fallen by ½ on either side.
    pub excursion: (f64, f64),
    pub candidates: Vec<Candidate>,
}

/// Maximises `log_likelihood(p)` over [0, 1] to `tolerance` and bounds p where `2·scale·(max − value)` reaches χ²₁.
///
/// `scale_at(p̂)` is information over score variance (Godambe 1960), 1 for independent observations. AIC compares likelihoods
/// scaled the same way (quasi-AIC: Burnham & Anderson 2002, section 2.5).
///
/// At a boundary the interval is one-sided and the excursion stops there.
pub(super) fn profile_share(
    choice: ModelChoice,
    tolerance: f64,
    mut log_likelihood: impl FnMut(f64) -> Result<f64, FitError>,
    scale_at: impl FnOnce(f64) -> Result<f64, FitError>,
) -> Result<Profile, FitError> {
    let failure = Cell::new(None);
    let mut value = |p: f64| match log_likelihood(p) {
        Ok(value) => value,
        Err(error) => {
            failure.set(failure.take().or(Some(error)));
            f64::NEG_INFINITY
        }
    };
    let best = minimise(0.0, 1.0, tolerance, |p| -value(p));
    let ends = [(Model::Uniform, 0.0, value(0.0)), (Model::Preferential, 1.0, value(1.0))];
    if let Some(error) = failure.take() {
        return Err(error);
    }
    if !best.converged {
        return Err(FitError::NotConverged { detail: format!("the preferential share stood at {}", best.at) });
    }
    let scale = scale_at(best.at)?;
    if !scale.is_finite() {
        let detail =
            format!("the scatter of the likelihood's slope at a preferential share of {} is not finite", best.at);
        return Err(FitError::NotConverged { detail });
    }
    let (at, top) = (best.at, -best.value);
    let mut bounds = |fall: f64| {
        let mut side = |end: f64| {
            let direction = (end - at).signum();
            // In square roots a parabola is straight, and the secant lands at once.
            let excess = |distance: f64| {
                // The likelihood there is known at the maximum and at the ends.
                let share = at + direction * distance;
                let known = ends.iter().find(|&&(_, end, _)| end == share).map(|&(_, _, value)| value);
                let value = if distance == 0.0 { top } else { known.unwrap_or_else(|| value(share)) };
                (2.0 * scale * (top - value)).max(0.0).sqrt() - fall.sqrt()
            };
            at + direction * increasing_root(0.0, (end - at).abs(), tolerance, excess)
        };
        (if at > 0.0 { side(0.0) } else { 0.0 }, if at < 1.0 { side(1.0) } else { 1.0 })
    };
    let (low, high) = bounds(chi_squared_quantile(ESTIMATE_LEVEL));
    let excursion = bounds(1.0);
    if let Some(error) = failure.take() {
        return Err(error);
    }
    let candidates = weighed(&[ends[0], ends[1], (Model::Mix, at, top)], scale);
    let interval = Interval { level: ESTIMATE_LEVEL, low, high };
    let (model, share, excursion) = match choice {
        ModelChoice::Only(Model::Uniform) => (Model::Uniform, Estimate::given(0.0), (0.0, 0.0)),
        ModelChoice::Only(Model::Preferential) => (Model::Preferential, Estimate::given(1.0), (1.0, 1.0)),
        // Candidates with a parameter of their own are mixes once that parameter is known.
        ModelChoice::Only(_) => (Model::Mix, Estimate { value: at, interval: Some(interval) }, excursion),
        ModelChoice::Auto => {
            let heaviest = candidates.iter().max_by(|a, b| a.weight.total_cmp(&b.weight));
            let (model, value) = heaviest.map_or((Model::Mix, at), |c| (c.model, c.preferential_share));
            // A special case may be the likeliest and the mix still be uncertain: the interval stays the mix's.
            let interval = Interval { low: low.min(value), high: high.max(value), ..interval };
            (model, Estimate { value, interval: Some(interval) }, (excursion.0.min(value), excursion.1.max(value)))
        }
    };
    Ok(Profile { model, share, excursion, candidates })
}

/// Candidates that can produce the counts at all, with their AIC weights (Akaike 1978).
fn weighed(candidates: &[(Model, f64, f64)], scale: f64) -> Vec<Candidate> {
    let parameters = |model| if model == Model::Mix { 1.0 } else { 0.0 };
    let mut rows: Vec<Candidate> = candidates
        .iter()
        .filter(|&&(_, _, log_likelihood)| log_likelihood.is_finite())
        .map(|&(model, preferential_share, log_likelihood)| {
            let aic = 2.0 * parameters(model) - 2.0 * scale * log_likelihood;
            Candidate { model, preferential_share, parameter: None, log_likelihood, aic, weight: 0.0 }
        })
        .collect();
    weigh(&mut rows);
    rows
}

/// Sets every candidate's AIC weight (Akaike 1978).
pub(super) fn weigh(rows: &mut [Candidate]) {
    let least = rows.iter().map(|c| c.aic).fold(f64::INFINITY, f64::min);
    let total: f64 = rows.iter().map(|c| (-0.5 * (c.aic - least)).exp()).sum();
    for row in rows {
        row.weight = (-0.5 * (row.aic - least)).exp() / total;
    }
}

/// Quantile of χ² with one degree of freedom: 2.7055 at 0.9.
fn chi_squared_quantile(level: f64) -> f64 {
    ChiSquared::new(1.0).map_or(f64::NAN, |law| law.inverse_cdf(level))
}

//! Every candidate's likeliest forces of one period, without intervals: what a record of past forecasts needs.

use super::entry::entry_degrees;
use super::successive::{likeliest_share, periods};
use super::transitions::fit_transitions;
use super::{FitError, FitRequest, Fixed, Force, Forces, Model};
use crate::model::{Evidence, GrowthParameters};

/// Share of dormant nodes: half of them.
const ASSUMED_DORMANT_SHARE: f64 = 0.5;
/// Variance of growth factors: as wide as their mean.
const ASSUMED_GROWTH_VARIANCE: f64 = 1.0;

/// A candidate with its likeliest forces.
#[derive(Debug, Clone, PartialEq)]
pub struct Mechanism {
    /// The candidate.
    pub model: Model,
    /// Its forces, with the arrivals and links per arrival of the newest period.
    pub forces: GrowthParameters,
}

/// The candidates' likeliest forces by the crossing flows of the snapshots in `evidence`; departures, losses and entry degrees from
/// transitions, where there are some, or as given. The dormant share is taken as one half and the variance of growth factors as one:
/// as members of a pool they are to differ from the mix, not to be exact. The power kernel is left out, for want of its exponent.
///
/// # Errors
/// [`FitError::NotIdentified`] when no period shows growth; cancellation.
pub fn mechanisms(
    evidence: &Evidence,
    request: &FitRequest,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<Mechanism>, FitError> {
    // The mix alone: every further candidate costs as much again, and a record has a dozen origins.
    let moves = match evidence.transitions() {
        [] => None,
        _ => Some(fit_transitions(evidence, &[Model::Mix], Fixed::default(), cancelled)?),
    };
    let zero = Force::given(0.0);
    let given_or = |given: Option<f64>, found: Option<Force>| given.map(Force::given).or(found).unwrap_or(zero);
    let plain = Forces {
        departures: given_or(request.departures_per_node_day, moves.as_ref().map(|m| m.departures)),
        link_losses: given_or(request.link_losses_per_link_day, moves.as_ref().and_then(|m| m.link_losses)),
        kernel_exponent: Force::given(1.0),
        dormant_share: zero,
        growth_variance: zero,
    };
    let entry = match moves.as_ref().and_then(|moves| moves.entry.clone()) {
        Some(entry) if evidence.entry().is_none() => entry,
        _ => entry_degrees(evidence, plain.has_losses())?.0,
    };
    let mut found = Vec::new();
    for model in Model::ALL {
        let mut forces = plain;
        match model {
            Model::Uniform | Model::Preferential | Model::Mix => {}
            Model::Power => continue,
            Model::Dormancy => forces.dormant_share = Force::given(ASSUMED_DORMANT_SHARE),
            Model::GrowthVariance => forces.growth_variance = Force::given(ASSUMED_GROWTH_VARIANCE),
        }
        let summary = moves.as_ref().map(|moves| &moves.summary);
        let (periods, _) = periods(evidence, &entry, &forces, request.links_per_node_day, summary)?;
        let share = match model {
            Model::Uniform => 0.0,
            Model::Preferential => 1.0,
            _ => likeliest_share(&periods, cancelled)?,
        };
        if let Some(newest) = periods.last() {
            found.push(Mechanism { model, forces: newest.forces(share) });
        }
    }
    Ok(found)
}

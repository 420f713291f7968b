//! Every candidate's likeliest forces of one period, without intervals: what a record of past forecasts needs.

use super::entry::entry_degrees;
use super::successive::{likeliest_share, periods};
use super::transitions::fit_transitions;
use super::{FitError, FitRequest, Fixed, Force, Forces, Model};
use crate::model::{Evidence, GrowthParameters};

/// Share of dormant nodes where nothing tells it: half of them.
const ASSUMED_DORMANT_SHARE: f64 = 0.5;
/// Variance of growth factors where nothing tells it: as wide as their mean.
const ASSUMED_GROWTH_VARIANCE: f64 = 1.0;

/// A candidate with its likeliest forces.
#[derive(Debug, Clone, PartialEq)]
pub struct Mechanism {
    /// The candidate.
    pub model: Model,
    /// Its forces, with the arrivals and links per arrival of the newest period.
    pub forces: GrowthParameters,
    /// Whether its own parameter was assumed, for want of evidence that tells it.
    pub assumed: bool,
}

/// The candidates' likeliest forces by the crossing flows of the snapshots in `evidence`; departures, losses, entry degrees
/// and the candidates' own parameters from transitions, where there are some, or as given. A dormant share that nothing tells is
/// taken as one half and a growth variance as one, said in [`Mechanism::assumed`]; a kernel exponent that nothing tells leaves
/// its candidate out.
///
/// # Errors
/// [`FitError::NotIdentified`] when no period shows growth; cancellation.
pub fn mechanisms(
    evidence: &Evidence,
    request: &FitRequest,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<Mechanism>, FitError> {
    let own = [Model::Mix, Model::Power, Model::Dormancy, Model::GrowthVariance];
    let moves = match evidence.transitions() {
        [] => None,
        _ => Some(fit_transitions(evidence, &own, Fixed::default(), cancelled)?),
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
    let read = |model| moves.as_ref()?.candidates.iter().find(|c| c.model == model)?.own;
    let mut found = Vec::new();
    for model in Model::ALL {
        let mut forces = plain;
        let own = read(model);
        match model {
            Model::Uniform | Model::Preferential | Model::Mix => {}
            Model::Power => match own {
                Some(exponent) => forces.kernel_exponent = exponent,
                None => continue,
            },
            Model::Dormancy => forces.dormant_share = own.unwrap_or(Force::given(ASSUMED_DORMANT_SHARE)),
            Model::GrowthVariance => forces.growth_variance = own.unwrap_or(Force::given(ASSUMED_GROWTH_VARIANCE)),
        }
        let summary = moves.as_ref().map(|moves| &moves.summary);
        let (periods, _) = periods(evidence, &entry, &forces, request.links_per_node_day, summary)?;
        let share = match model {
            Model::Uniform => 0.0,
            Model::Preferential => 1.0,
            _ => likeliest_share(&periods, cancelled)?,
        };
        if let Some(newest) = periods.last() {
            let assumed = own.is_none() && matches!(model, Model::Dormancy | Model::GrowthVariance);
            found.push(Mechanism { model, forces: newest.forces(share), assumed });
        }
    }
    Ok(found)
}

//! Rung 1: one snapshot, read as the stationary law of a network that always grew in proportion.

use super::profile::{Profile, profile_share};
use super::score_variance::information_over_variance;
use super::stationary::StationaryLaw;
use super::{FitError, FitRequest, Model, ModelChoice};
use crate::model::{AttachmentMix, DegreeCounts, EntryDegrees};

/// The preferential share is found to this, well under the standard error of 10⁹ nodes.
const SHARE_TOLERANCE: f64 = 1e-9;

/// Fits the preferential share by maximum likelihood over the histogram: `Σ n_k·ln P_k(p)`, with ℓ = K/N − ē.
///
/// Cost: about 60 passes over the distinct degrees.
pub(super) fn fit_one_snapshot(
    counts: &DegreeCounts,
    entry: &EntryDegrees,
    links_per_arrival: f64,
    request: &FitRequest,
) -> Result<Profile, FitError> {
    if request.choice == ModelChoice::Only(Model::Preferential) && entry.smallest() == 0 {
        return Err(FitError::NotIdentified {
            detail:
                "purely preferential growth cannot give a first link to a node that arrives without one, yet newcomers \
                     arrive with 0 links; choose model mix, or give entry_degrees above 0"
                    .into(),
        });
    }
    let log_likelihood = |p: f64| {
        let law = StationaryLaw::new(
            AttachmentMix::new(p).unwrap_or(AttachmentMix::UNIFORM),
            links_per_arrival,
            entry.clone(),
        );
        let logs = law.log_pmf(counts.degrees());
        Ok(logs.iter().zip(counts.nodes_by_degree()).map(|(log, &nodes)| nodes as f64 * log).sum())
    };
    let scale_at = |p: f64| Ok(information_over_variance(p, links_per_arrival, entry));
    profile_share(request.choice, SHARE_TOLERANCE, log_likelihood, scale_at)
}

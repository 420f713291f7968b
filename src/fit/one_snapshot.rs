//! Rung 1: one snapshot, read as the stationary law of a network that always grew in proportion.

use super::condensed::CondensedCounts;
use super::profile::{Profile, profile_share};
use super::score_variance::information_over_variance;
use super::stationary::StationaryLaw;
use super::{FitError, FitRequest, Model, ModelChoice};
use crate::model::{AttachmentMix, DegreeCounts, EntryDegrees};
use crate::numerics::work::{Work, did};

/// The preferential share is found to this, well under the standard error of 10⁹ nodes.
const SHARE_TOLERANCE: f64 = 1e-9;

/// Fits the preferential share by maximum likelihood over the histogram: `Σ n_k·ln P_k(p)`, with ℓ = K/N − ē.
///
/// Cost: one pass over the distinct degrees, then about 60 over the points that stand for them.
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
    let condensed = CondensedCounts::new(counts, entry.shares().last().map_or(0, |&(degree, _)| degree));
    let log_likelihood = |p: f64| {
        let law = StationaryLaw::new(
            AttachmentMix::new(p).unwrap_or(AttachmentMix::UNIFORM),
            links_per_arrival,
            entry.clone(),
        );
        did(Work::LikelihoodTerms, condensed.points().len() as u64);
        let mut logs = law.log_pmf_from_below();
        let terms = condensed.points().map(|(degree, weight)| (logs.at(degree), weight));
        // A degree that cannot come about rules the law out, whatever the sign of its weight.
        let sum = |sum: f64, (log, weight)| if log == f64::NEG_INFINITY { None } else { Some(sum + weight * log) };
        Ok(terms.into_iter().try_fold(0.0, sum).unwrap_or(f64::NEG_INFINITY))
    };
    let scale_at = |p: f64| Ok(information_over_variance(p, links_per_arrival, entry));
    profile_share(request.choice, SHARE_TOLERANCE, log_likelihood, scale_at)
}

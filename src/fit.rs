//! Infers the attachment mix from degree counts; the answer says which rung of the evidence ladder it stands on.

mod diagnostics;
mod entry;
mod infer;
mod one_snapshot;
mod profile;
mod score_variance;
mod stationary;
mod successive;

pub use infer::fit;
pub use stationary::StationaryLaw;

use crate::growth::GrowthError;
use crate::model::{AttachmentMix, EntryDegrees, Estimate, Warning};

/// A candidate attachment kernel.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Model {
    /// p = 0: every link end picks uniformly.
    Uniform,
    /// p = 1: every link end picks in proportion to degree.
    Preferential,
    /// 0 ≤ p ≤ 1.
    Mix,
}

/// Which candidate the caller wants.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum ModelChoice {
    /// The candidate with the greatest AIC weight.
    #[default]
    Auto,
    /// This one.
    Only(Model),
}

/// The evidence a fit stands on.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rung {
    /// Nothing was fitted: the caller gave the mix.
    Given,
    /// One snapshot, read as the stationary law of a network that always grew in proportion.
    OneSnapshot,
    /// Crossing flows between successive snapshots.
    SuccessiveSnapshots,
}

impl FitRequest {
    /// Whether nodes leave or links are lost.
    pub fn has_losses(&self) -> bool {
        self.departures_per_node_day > 0.0 || self.link_losses_per_link_day > 0.0
    }
}

/// What the caller asks of a fit.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct FitRequest {
    /// Candidate wanted.
    pub choice: ModelChoice,
    /// A mix to take as given instead of fitting it.
    pub fixed_mix: Option<AttachmentMix>,
    /// ℓ to take as given instead of reading it from the data.
    pub links_per_arrival: Option<f64>,
    /// ι, link ends landing per present node and day, as given by the caller.
    pub links_per_node_day: f64,
    /// δ, departure hazard of a node, 1/day, as given by the caller.
    pub departures_per_node_day: f64,
    /// w, loss hazard of a link end, 1/day, as given by the caller.
    pub link_losses_per_link_day: f64,
    /// Seed of the goodness-of-fit bootstrap.
    pub seed: u64,
}

/// One candidate's record on the evidence.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Candidate {
    /// The kernel.
    pub model: Model,
    /// Its fitted preferential share.
    pub preferential_share: f64,
    /// Log-likelihood at the fit (composite for successive snapshots).
    pub log_likelihood: f64,
    /// Akaike's criterion, lower is better, on the likelihood scaled by how its score really scatters (quasi-AIC).
    pub aic: f64,
    /// AIC weight among the candidates, adding up to one.
    pub weight: f64,
}

/// How well the fitted law reproduces the counts.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Goodness {
    /// Largest distance between observed and fitted share of nodes with at least k links (Kolmogorov–Smirnov).
    pub distance: f64,
    /// Share of seeded bootstrap samples of the fitted law that lie at least as far from it; one snapshot only.
    pub p_value: Option<f64>,
    /// Bootstrap samples drawn.
    pub replicates: u32,
    /// ln(observed/fitted) of the tail point where it is largest in size, among those with at least 10 nodes observed.
    pub worst_log_ratio: f64,
    /// Mean squared misfit of the crossing flows over their variance, 1 when only chance is at work; successive snapshots
    /// only.
    pub dispersion: Option<f64>,
    /// Typical relative error of the fitted flows, chance included (1.4826 times the median of |observed − fitted|/fitted);
    /// successive snapshots only.
    pub flow_error: Option<f64>,
}

/// Observed and fitted tail size at one degree.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TailPoint {
    /// Degree k.
    pub degree: u64,
    /// Nodes with at least k links in the newest snapshot.
    pub observed: u64,
    /// The same by the fitted law.
    pub fitted: f64,
}

/// Relative standard deviations of the rates read off the totals; 0 for what was given.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct RateExcursion {
    /// Of ℓ.
    pub links_per_arrival: f64,
    /// Of the arrival rate.
    pub arrivals: f64,
}

/// A fitted attachment mix with its diagnostics.
#[derive(Debug, Clone, PartialEq)]
pub struct Fit {
    /// The kernel chosen.
    pub model: Model,
    /// The evidence it stands on.
    pub rung: Rung,
    /// Preferential share p.
    pub preferential_share: Estimate,
    /// p one standard deviation below and above the estimate, kept within [0, 1]: the forecast's excursions.
    pub share_excursion: (f64, f64),
    /// ℓ, link ends landing on present nodes per arrival.
    pub links_per_arrival: Estimate,
    /// Arrivals a day over the newest period, when there are two snapshots or more.
    pub arrivals_per_day: Option<Estimate>,
    /// How uncertain ℓ and the arrival rate are.
    pub rate_excursion: RateExcursion,
    /// Entry degrees given, or read from the data.
    pub entry: EntryDegrees,
    /// Exponent of the degree law's tail, 1 + 1/β; none when p = 0 (the tail is geometric).
    pub tail_exponent: Option<Estimate>,
    /// Every candidate's record.
    pub candidates: Vec<Candidate>,
    /// How well the fitted law reproduces the counts; none when nothing was fitted.
    pub goodness: Option<Goodness>,
    /// Observed against fitted tail at log-spaced degrees.
    pub tail: Vec<TailPoint>,
    /// What the reader must know.
    pub warnings: Vec<Warning>,
}

/// Why no fit can be given; each says what would make it possible.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum FitError {
    /// The evidence does not tell the mix.
    #[error("{detail}")]
    NotIdentified {
        /// What is missing and what would supply it.
        detail: String,
    },
    /// An iteration reached its cap.
    #[error("the fit did not converge: {detail}")]
    NotConverged {
        /// Which iteration, and where it stood.
        detail: String,
    },
    /// The caller asked to stop.
    #[error("the fit was cancelled")]
    Cancelled,
    /// Growth between two snapshots cannot be computed.
    #[error(transparent)]
    Growth(#[from] GrowthError),
}

//! Infers the attachment mix from degree counts; the answer says which rung of the evidence ladder it stands on.

mod condensed;
mod diagnostics;
mod entry;
mod infer;
mod link_events;
mod mechanisms;
mod one_snapshot;
mod profile;
mod rates;
mod score_variance;
mod stationary;
mod successive;
mod transitions;
mod verdict;

pub use infer::fit;
pub use mechanisms::{Mechanism, mechanisms};
pub use stationary::StationaryLaw;

use jiff::Timestamp;

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
    /// A mix in which preferential ends pick in proportion to k^γ.
    Power,
    /// A mix among the nodes that still draw links.
    Dormancy,
    /// A mix among nodes whose growth factors differ.
    GrowthVariance,
}

impl Model {
    /// Every candidate, simplest first.
    pub const ALL: [Self; 6] =
        [Self::Uniform, Self::Preferential, Self::Mix, Self::Power, Self::Dormancy, Self::GrowthVariance];

    /// Its name as callers write it.
    pub fn name(self) -> &'static str {
        match self {
            Self::Uniform => "uniform",
            Self::Preferential => "preferential",
            Self::Mix => "mix",
            Self::Power => "power",
            Self::Dormancy => "dormancy",
            Self::GrowthVariance => "growth_variance",
        }
    }
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
    /// Each node's degree before and after.
    Transitions,
    /// Each landing end of a link list.
    LinkEvents,
}

impl Rung {
    /// The rungs that a mix can be read from, lowest first.
    pub const READ: [Self; 4] = [Self::OneSnapshot, Self::SuccessiveSnapshots, Self::Transitions, Self::LinkEvents];

    /// Its name as callers write it.
    pub fn name(self) -> &'static str {
        match self {
            Self::Given => "given",
            Self::OneSnapshot => "one_snapshot",
            Self::SuccessiveSnapshots => "successive_snapshots",
            Self::Transitions => "transitions",
            Self::LinkEvents => "link_events",
        }
    }
}

/// What to take as given instead of fitting it.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Fixed {
    /// The attachment mix.
    pub mix: Option<AttachmentMix>,
    /// γ, kernel exponent.
    pub kernel_exponent: Option<f64>,
    /// d, share of nodes that draw no links.
    pub dormant_share: Option<f64>,
    /// σ², variance of the nodes' growth factors.
    pub growth_variance: Option<f64>,
}

impl Fixed {
    /// The given value of a candidate's own parameter.
    pub fn own(&self, model: Model) -> Option<f64> {
        match model {
            Model::Power => self.kernel_exponent,
            Model::Dormancy => self.dormant_share,
            Model::GrowthVariance => self.growth_variance,
            Model::Uniform | Model::Preferential | Model::Mix => None,
        }
    }
}

/// What the caller asks of a fit.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct FitRequest {
    /// Candidate wanted.
    pub choice: ModelChoice,
    /// Evidence that the mix is to be read from; the best there is when left out.
    pub rung: Option<Rung>,
    /// What to take as given.
    pub fixed: Fixed,
    /// ℓ to take as given instead of reading it from the data.
    pub links_per_arrival: Option<f64>,
    /// ι, link ends landing per present node and day, as given by the caller.
    pub links_per_node_day: f64,
    /// δ, departure hazard of a node, 1/day, to take as given instead of reading it from transitions.
    pub departures_per_node_day: Option<f64>,
    /// w, loss hazard of a link end, 1/day, to take as given instead of reading it from transitions.
    pub link_losses_per_link_day: Option<f64>,
    /// Seed of the goodness-of-fit bootstrap.
    pub seed: u64,
}

/// An estimate and where it stands one standard deviation to either side, what it may move by until the forecast included.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Force {
    /// The estimate.
    pub estimate: Estimate,
    /// One standard deviation below and above.
    pub excursion: (f64, f64),
}

impl Force {
    /// A value taken as given.
    pub fn given(value: f64) -> Self {
        Self { estimate: Estimate::given(value), excursion: (value, value) }
    }

    /// The estimate's value.
    pub fn value(&self) -> f64 {
        self.estimate.value
    }
}

/// The forces besides the mix.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Forces {
    /// δ, departure hazard of a node, 1/day.
    pub departures: Force,
    /// w, loss hazard of a link end, 1/day.
    pub link_losses: Force,
    /// γ, kernel exponent; 1 for every candidate but the power kernel.
    pub kernel_exponent: Force,
    /// d, share of nodes that draw no links; 0 for every candidate but dormancy.
    pub dormant_share: Force,
    /// σ², variance of growth factors; 0 for every candidate but growth variance.
    pub growth_variance: Force,
}

impl Forces {
    /// Whether nodes leave or links are lost.
    pub fn has_losses(&self) -> bool {
        self.departures.value() > 0.0 || self.link_losses.value() > 0.0
    }
}

/// One candidate's record on the evidence.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Candidate {
    /// The kernel.
    pub model: Model,
    /// Its fitted preferential share.
    pub preferential_share: f64,
    /// Its own parameter: γ of the power kernel, d of dormancy, σ² of growth variance.
    pub parameter: Option<f64>,
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

/// Nodes set aside as outliers whose degree before lay in one class.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct OutlierClass {
    /// Smallest degree of the class.
    pub lowest: u64,
    /// Largest degree of the class.
    pub highest: u64,
    /// Nodes set aside.
    pub nodes: u64,
}

/// What a fit to transitions set aside, because no candidate's growth explains it.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Outliers {
    /// Nodes whose degree jumped.
    pub nodes: u64,
    /// The classes of degree they came from, ascending.
    pub classes: Vec<OutlierClass>,
    /// (before, after, nodes), farthest jump first.
    pub jumps: Vec<(u64, u64, u64)>,
    /// (before, after) of nodes that departed as another arrived with as many links: taken as one node under a new name.
    pub renamed: Vec<(u64, u64)>,
}

/// What one period's transitions tell under the likeliest candidate, a node or a link over the period.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PeriodRates {
    /// The earlier date.
    pub from: Timestamp,
    /// The later date.
    pub to: Timestamp,
    /// Share of the nodes present that departed, those under a new name included.
    pub departure_share: f64,
    /// Uniform gains a node, outliers left out.
    pub uniform_gain: f64,
    /// Mean gain of the nodes that had no link, as counted; none when every node had one.
    pub first_gain: Option<f64>,
    /// Preferential gains a link.
    pub gain_per_link: f64,
    /// Losses a link.
    pub loss_per_link: f64,
    /// Ends that landed on nodes present, a day.
    pub landed_per_day: f64,
}

/// What transitions tell.
#[derive(Debug, Clone, PartialEq)]
pub struct TransitionSummary {
    /// Period by period, oldest first.
    pub periods: Vec<PeriodRates>,
    /// What was set aside.
    pub outliers: Outliers,
    /// Every candidate's record on the transitions.
    pub candidates: Vec<Candidate>,
}

/// Landings against exposure at one range of degree.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CurvePoint {
    /// Smallest degree.
    pub lowest: u64,
    /// Largest degree.
    pub highest: u64,
    /// Landing ends seen.
    pub landings: u64,
    /// Landings over those that would come if every node drew alike: the attachment kernel, in units of its mean.
    pub attraction: Estimate,
    /// The same by the fitted mix.
    pub fitted: f64,
}

/// What a link list tells of attachment, each landing end with its target's degree just before.
#[derive(Debug, Clone, PartialEq)]
pub struct Attachment {
    /// Landing ends.
    pub landings: u64,
    /// Preferential share by the exact likelihood of every landing.
    pub preferential_share: Force,
    /// γ of the kernel (1−p)/N + p·k^γ/Σk^γ, p free.
    pub kernel_exponent: Force,
    /// Probability of a likelihood ratio this large if γ were 1 (Wilks 1938).
    pub linear_p_value: f64,
    /// The non-parametric attachment curve.
    pub curve: Vec<CurvePoint>,
    /// Every candidate's record on the landings.
    pub candidates: Vec<Candidate>,
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
    /// Departures, losses, and what the chosen candidate has of its own.
    pub forces: Forces,
    /// Entry degrees given, or read from the data.
    pub entry: EntryDegrees,
    /// Exponent of the degree law's tail, 1 + 1/β; none when p = 0 (the tail is geometric).
    pub tail_exponent: Option<Estimate>,
    /// Every candidate's record on the evidence that the mix was read from.
    pub candidates: Vec<Candidate>,
    /// How well the fitted law reproduces the counts; none when nothing was fitted.
    pub goodness: Option<Goodness>,
    /// Observed against fitted tail at log-spaced degrees.
    pub tail: Vec<TailPoint>,
    /// What the transitions tell by themselves; none without them.
    pub transitions: Option<TransitionSummary>,
    /// What the link list tells by itself; none without one.
    pub attachment: Option<Attachment>,
    /// The fit in words.
    pub verdict: String,
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
    Growth(GrowthError),
}

impl From<GrowthError> for FitError {
    fn from(error: GrowthError) -> Self {
        if error == GrowthError::Cancelled { Self::Cancelled } else { Self::Growth(error) }
    }
}

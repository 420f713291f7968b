//! Answers as they are kept and sent: their field names are a promise to callers.

mod questions;

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use super::numbers::{Count, Real};

pub use questions::{
    AmountAnswer, BandAnswer, BandsAnswer, BandsAtDateAnswer, ClassPassedAnswer, ClassPassingAnswer, DateAtAnswer,
    HubRankAnswer, LimitAnswer, LimitAtDateAnswer, NextHubsAnswer, PassedAnswer, PassingAnswer, ScenarioAnswer,
    ScenarioAtDateAnswer, SustainableAnswer, TailDifferenceAnswer, WatchAnswer, WatchedClassAnswer,
    WatchedDegreeAnswer, WatchedNodeAnswer,
};

/// A kept forecast.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ForecastRun {
    /// Id of the run.
    pub id: Uuid,
    /// When it was answered, RFC 3339.
    #[schema(format = DateTime)]
    pub created_at: String,
    /// Tracked network it belongs to; null for a forecast from inline counts.
    pub network: Option<String>,
    /// The forecast.
    #[serde(flatten)]
    pub answer: ForecastAnswer,
}

/// A forecast and the fit it stands on.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ForecastAnswer {
    /// The caller's name for the run.
    pub label: Option<String>,
    /// Engine and version that computed it.
    #[schema(examples("tailcast 0.1.0"))]
    pub engine: String,
    /// Seed of everything random in it, so far the samples behind the goodness of fit.
    pub seed: u64,
    /// Digest of the validated inputs in canonical form, seed and label left out. The same digest, seed and engine
    /// give the same fit and forecast, byte for byte.
    #[schema(examples("sha-256:9f86d081884c7d659a2feaa0c55ad015a3bf4f1b2b0b822cd15d6c15b0f00a08"))]
    pub inputs_digest: String,
    /// The fitted attachment mix.
    pub fit: FitReport,
    /// What past snapshots counted, oldest first; at most 120 of them, evenly spread, the newest among them.
    #[serde(default)]
    #[schema(required = true)]
    pub history: Vec<HistoryAnswer>,
    /// Observed against fitted tail of the newest snapshot, at most 40 degrees; empty where no law was fitted.
    #[serde(default)]
    #[schema(required = true)]
    pub curve: Vec<TailPointAnswer>,
    /// One entry a date, in ascending order.
    pub forecast: Vec<DateAnswer>,
    /// How candidates and plain trends were weighed for the tails, by periods ahead; empty where the forecast is by one candidate.
    #[serde(default)]
    #[schema(required = true)]
    pub pools: Vec<PoolAnswer>,
    /// Capacity limits asked about, in the order asked.
    pub limits: Vec<LimitAnswer>,
    /// Costs by degree; null when not asked about.
    #[serde(default)]
    #[schema(required = true)]
    pub bands: Option<BandsAnswer>,
    /// Watched nodes and classes; null when not asked about.
    #[serde(default)]
    #[schema(required = true)]
    pub watch: Option<WatchAnswer>,
    /// The largest nodes, one entry a date; empty when not asked about.
    #[serde(default)]
    #[schema(required = true)]
    pub next_hubs: Vec<NextHubsAnswer>,
    /// What-ifs asked about, in the order asked.
    #[serde(default)]
    #[schema(required = true)]
    pub scenarios: Vec<ScenarioAnswer>,
    /// What was seen in these inputs that the reader must know before acting.
    pub warnings: Vec<WarningAnswer>,
    /// What holds for every forecast.
    pub cautions: Vec<String>,
}

/// What a snapshot counted.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct HistoryAnswer {
    /// Its date.
    #[schema(examples("2026-06-01"))]
    pub as_of: String,
    /// Nodes.
    pub nodes: u64,
    /// Tail sizes at the thresholds asked about, those of limits among them, ascending.
    pub tail: Vec<TailCountAnswer>,
}

/// How many nodes had at least `threshold` links.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct TailCountAnswer {
    /// The threshold.
    pub threshold: u64,
    /// Nodes at or above it.
    pub nodes: u64,
}

/// How the members of a pooled forecast were weighed.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PoolAnswer {
    /// Periods ahead, a period being the typical time between snapshots; farther dates go by the last pool.
    pub periods_ahead: u32,
    /// Past dates that the members were scored on; at 0 they are weighed by how well each explains the newest period.
    pub scored_dates: u64,
    /// Relative error of the flow past a threshold that intervals allow for.
    pub flow_error: Real,
    /// Factor on the width of intervals, by how past ones did.
    pub interval_scale: Real,
    /// The members, heaviest first.
    pub members: Vec<PoolMemberAnswer>,
    /// The same in words.
    pub detail: String,
}

/// A member of a pool.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PoolMemberAnswer {
    /// A candidate, a candidate corrected by its newest flows, or a plain trend.
    #[schema(examples("mix_flow_corrected"))]
    pub member: String,
    /// Mean of |ln(forecast/observed)|·√observed over its record; lower is better.
    pub score: Real,
    /// Its weight; the weights add up to one.
    pub weight: Real,
}

/// A kept fit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct FitRun {
    /// Id of the run.
    pub id: Uuid,
    /// When it was answered, RFC 3339.
    #[schema(format = DateTime)]
    pub created_at: String,
    /// Tracked network it belongs to; null for a fit of inline counts.
    pub network: Option<String>,
    /// The fit.
    #[serde(flatten)]
    pub answer: FitAnswer,
}

/// A fit with its diagnostics.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct FitAnswer {
    /// The caller's name for the run.
    pub label: Option<String>,
    /// Engine and version that computed it.
    #[schema(examples("tailcast 0.1.0"))]
    pub engine: String,
    /// Seed of everything random in it, so far the samples behind the goodness of fit.
    pub seed: u64,
    /// Digest of the validated inputs in canonical form, seed and label left out.
    pub inputs_digest: String,
    /// The fitted attachment mix.
    pub fit: FitReport,
    /// Observed against fitted tail of the newest snapshot.
    pub tail: Vec<TailPointAnswer>,
    /// What the transitions tell by themselves; null without them.
    pub transitions: Option<TransitionsAnswer>,
    /// What the link list tells by itself; null without link events.
    pub attachment: Option<AttachmentAnswer>,
    /// What was seen in these inputs that the reader must know before acting.
    pub warnings: Vec<WarningAnswer>,
    /// What holds for every fit.
    pub cautions: Vec<String>,
}

/// A fitted attachment mix.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct FitReport {
    /// The candidate chosen.
    pub model: AttachmentModel,
    /// The evidence it stands on.
    pub evidence: EvidenceKind,
    /// Share of landing links that pick their node in proportion to its degree.
    pub preferential_share: EstimateAnswer,
    /// Link ends that land on present nodes with each arrival.
    pub links_per_arrival: EstimateAnswer,
    /// Arrivals a day over the newest period; null when there is one snapshot.
    pub arrivals_per_day: Option<EstimateAnswer>,
    /// Hazard that a node departs, per day; null when neither given nor read from transitions.
    pub departures_per_node_day: Option<EstimateAnswer>,
    /// Hazard that a link is lost, per day; null when neither given nor read from transitions.
    pub link_losses_per_link_day: Option<EstimateAnswer>,
    /// Power of the degree that preferential links follow; null but under the power model.
    pub kernel_exponent: Option<EstimateAnswer>,
    /// Share of present nodes that draw no links; null but under dormancy.
    pub dormant_share: Option<EstimateAnswer>,
    /// Variance of the nodes' growth factors; null but under growth variance.
    pub growth_variance: Option<EstimateAnswer>,
    /// Exponent of the degree law's tail; null when the tail falls faster than any power.
    pub tail_exponent: Option<EstimateAnswer>,
    /// `[degree, share]` pairs: the degrees newcomers arrive with.
    #[schema(value_type = Vec<Vec<f64>>)]
    pub entry_degrees: Vec<(u64, Real)>,
    /// Every candidate's record on the evidence that the mix was read from.
    pub candidates: Vec<CandidateAnswer>,
    /// How well the fitted law reproduces the counts; null when nothing was fitted.
    pub goodness: Option<GoodnessAnswer>,
    /// The fit in words; empty in runs from before there were any.
    #[serde(default)]
    #[schema(required = true)]
    pub verdict: String,
}

/// A candidate for how landing links pick their node.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum AttachmentModel {
    /// Every node alike.
    Uniform,
    /// In proportion to degree.
    Preferential,
    /// A share of each.
    Mix,
    /// A mix whose preferential links follow a power of the degree.
    Power,
    /// A mix among the nodes that still draw links.
    Dormancy,
    /// A mix among nodes that differ in how fast they grow.
    GrowthVariance,
}

/// The evidence a fit stands on.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum EvidenceKind {
    /// The caller gave the mix.
    Given,
    /// One snapshot, read as the outcome of steady growth from the start.
    OneSnapshot,
    /// How many nodes crossed each degree between successive snapshots.
    SuccessiveSnapshots,
    /// Each node's degree before and after.
    Transitions,
    /// Each landing link.
    LinkEvents,
}

/// An estimate and its interval; low, high and level are null when it was given or the data cannot bound it.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct EstimateAnswer {
    /// The estimate.
    pub estimate: Real,
    /// Lower end of its interval.
    pub low: Option<Real>,
    /// Upper end of its interval.
    pub high: Option<Real>,
    /// Coverage the interval aims at.
    pub level: Option<Real>,
}

/// One candidate's record on the evidence.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct CandidateAnswer {
    /// The candidate.
    pub model: AttachmentModel,
    /// Its preferential share.
    pub preferential_share: Real,
    /// Its own parameter: the kernel exponent, dormant share or growth variance; null where there is none.
    pub parameter: Option<Real>,
    /// Log-likelihood.
    pub log_likelihood: Real,
    /// Akaike's information criterion; lower is better.
    pub aic: Real,
    /// Weight among the candidates; the weights add up to one.
    pub weight: Real,
    /// The candidate in words; empty in runs from before there were any.
    #[serde(default)]
    #[schema(required = true)]
    pub verdict: String,
}

/// How well the fitted law reproduces the counts.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct GoodnessAnswer {
    /// Largest distance between observed and fitted share of nodes with at least so many links (Kolmogorov–Smirnov).
    pub distance: Real,
    /// Share of samples drawn from the fitted law that lie at least as far from it; null with two snapshots or more.
    pub p_value: Option<Real>,
    /// Samples drawn.
    pub replicates: u32,
    /// Logarithm of observed over fitted tail size where it is farthest from 0.
    pub worst_log_ratio: Real,
    /// Mean squared misfit of the flows past each degree over their variance, 1 when only chance is at work; null with
    /// one snapshot.
    pub dispersion: Option<Real>,
    /// Typical relative error of the fitted flows, chance included; null with one snapshot.
    pub flow_error: Option<Real>,
}

/// The forecast at one date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct DateAnswer {
    /// The date; RFC 3339 with the time of day when that is not 00:00 UTC.
    #[schema(examples("2026-12-01"))]
    pub date: String,
    /// Nodes.
    pub nodes: CountAnswer,
    /// Link ends.
    pub links: CountAnswer,
    /// Largest degree of any node.
    pub largest_degree: DegreeAnswer,
    /// Tail sizes, thresholds ascending.
    pub tail: Vec<TailAnswer>,
}

/// A forecast count.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct CountAnswer {
    /// The count in the newest snapshot.
    pub now: Count,
    /// Expected count.
    pub expected: Real,
    /// As likely to be exceeded as not.
    pub median: Real,
    /// Central intervals, levels ascending.
    pub intervals: Vec<IntervalAnswer>,
}

/// A forecast degree. It has no expected value: the tail may be so heavy that there is none.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct DegreeAnswer {
    /// The degree in the newest snapshot.
    pub now: Count,
    /// As likely to be exceeded as not.
    pub median: Real,
    /// Central intervals, levels ascending.
    pub intervals: Vec<IntervalAnswer>,
}

/// A forecast tail size: how many nodes have at least `threshold` links.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TailAnswer {
    /// The threshold.
    pub threshold: u64,
    /// Nodes at or above it in the newest snapshot.
    pub now: Count,
    /// Expected number.
    pub expected: Real,
    /// As likely to be exceeded as not.
    pub median: Real,
    /// Central intervals, levels ascending.
    pub intervals: Vec<IntervalAnswer>,
}

/// A central interval.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct IntervalAnswer {
    /// Coverage it aims at.
    pub level: Real,
    /// Lower end.
    pub low: Real,
    /// Upper end.
    pub high: Real,
}

/// Observed and fitted tail size at one degree.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TailPointAnswer {
    /// The degree.
    pub degree: u64,
    /// Nodes with at least so many links in the newest snapshot.
    pub observed: u64,
    /// The same by the fitted law.
    pub fitted: Real,
}

/// Something the reader must know before acting.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct WarningAnswer {
    /// Stable name.
    #[schema(examples("few_hubs"))]
    pub code: String,
    /// What was seen.
    pub detail: String,
}

/// What transitions tell.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TransitionsAnswer {
    /// Period by period, oldest first.
    pub periods: Vec<PeriodRatesAnswer>,
    /// Nodes set aside because no candidate's growth explains their jump.
    pub outliers: u64,
    /// The same by class of degree before.
    pub outlier_classes: Vec<OutlierClassAnswer>,
    /// `[before, after, nodes]`: the farthest jumps among them, at most 100.
    #[schema(value_type = Vec<Vec<u64>>)]
    pub jumps: Vec<(u64, u64, u64)>,
    /// `[before, after]`: hubs that departed as another node arrived with about as many links, taken as one node under a new
    /// name, at most 100; the largest first.
    #[schema(value_type = Vec<Vec<u64>>)]
    pub renamed: Vec<(u64, u64)>,
    /// Every candidate's record on the transitions.
    pub candidates: Vec<CandidateAnswer>,
}

/// What one period's transitions tell under the likeliest candidate.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PeriodRatesAnswer {
    /// The earlier date.
    pub from: String,
    /// The later date.
    pub to: String,
    /// Share of the nodes present that departed.
    pub departure_share: Real,
    /// Links gained a node over the period, whatever its degree, outliers left out.
    pub uniform_gain: Real,
    /// Mean gain of the nodes that had no link, as counted; null when every node had one.
    pub first_gain: Option<Real>,
    /// Links gained over the period a link held.
    pub gain_per_link: Real,
    /// Links lost over the period a link held.
    pub loss_per_link: Real,
    /// Link ends that landed on present nodes a day.
    pub landed_per_day: Real,
}

/// Outliers whose degree before lay in one class.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct OutlierClassAnswer {
    /// Smallest degree.
    pub lowest: u64,
    /// Largest degree.
    pub highest: u64,
    /// Nodes set aside.
    pub nodes: u64,
}

/// What a link list tells of attachment.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AttachmentAnswer {
    /// Link ends that landed on nodes present before.
    pub landings: u64,
    /// Preferential share by the likelihood of every landing.
    pub preferential_share: EstimateAnswer,
    /// Power of the degree that preferential links follow.
    pub kernel_exponent: EstimateAnswer,
    /// Probability of so much better a fit with a power of its own, if links followed degree in proportion.
    pub linear_p_value: Real,
    /// Landings by degree against what the fitted mix gives.
    pub curve: Vec<CurvePointAnswer>,
    /// Every candidate's record on the landings.
    pub candidates: Vec<CandidateAnswer>,
}

/// The attachment curve at one range of degree.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct CurvePointAnswer {
    /// Smallest degree.
    pub lowest: u64,
    /// Largest degree.
    pub highest: u64,
    /// Link ends that landed there.
    pub landings: u64,
    /// How often a node there draws a link, the average node being 1.
    pub attraction: EstimateAnswer,
    /// The same by the fitted mix.
    pub fitted: Real,
}

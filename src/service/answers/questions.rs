//! Answers to what is asked besides the tails.

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

use super::IntervalAnswer;
use crate::service::{Count, Real};

/// A capacity limit and how it fares.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct LimitAnswer {
    /// The caller's name for it.
    pub name: Option<String>,
    /// Links from which on a node counts.
    pub threshold: u64,
    /// The most nodes that are provided for.
    pub max_nodes: u64,
    /// The date up to which it must hold.
    #[schema(examples("2027-06-01"))]
    pub by: String,
    /// Probability of a crossing that is put up with.
    pub risk: Real,
    /// Nodes in the tail today.
    pub now: u64,
    /// How many more are allowed; negative when the limit is passed already.
    pub headroom: Count,
    /// Whether nodes in the tail stay in it, so that being above the limit and having crossed it are one.
    pub monotone: bool,
    /// By date: the forecast's dates and the limit's own.
    pub dates: Vec<LimitAtDateAnswer>,
    /// At the limit's own date.
    pub at_by: LimitAtDateAnswer,
    /// When the limit is crossed with probability 0.05, 0.5 and 0.95.
    pub crossing: Vec<DateAtAnswer>,
    /// When the probability of a crossing reaches the risk.
    pub risk_reached: DateAtAnswer,
    /// Days from the newest snapshot until then; null when that is not by the farthest date looked at.
    pub days_left: Option<Real>,
    /// The largest arrivals a day that keep the risk.
    pub arrivals: SustainableAnswer,
    /// The largest number of links per arrival that keeps the risk.
    pub links_per_arrival: SustainableAnswer,
    /// In words.
    pub verdict: String,
}

/// How likely a limit is passed by a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct LimitAtDateAnswer {
    /// The date.
    pub date: String,
    /// Probability that more nodes than the limit allows are in the tail at the date.
    pub exceeding: Real,
    /// Probability that there were more at some time up to the date.
    pub crossed: Real,
}

/// A probability and the first date by which it is reached.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct DateAtAnswer {
    /// The probability.
    pub probability: Real,
    /// The date; null: not by the farthest date looked at.
    pub date: Option<String>,
}

/// The largest rate that keeps a risk.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct SustainableAnswer {
    /// The rate; null when no rate keeps the risk or every rate does.
    pub rate: Option<Real>,
    /// The same over the rate that is expected or given.
    pub factor: Option<Real>,
    /// Were the forces known exactly, the largest rate would lie in this with the probability `level`.
    pub interval: Option<IntervalAnswer>,
    /// In words; where there is no rate, what comes nearest.
    pub detail: String,
}

/// An amount with its central intervals.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AmountAnswer {
    /// Expected amount.
    pub expected: Real,
    /// Central intervals, levels ascending.
    pub intervals: Vec<IntervalAnswer>,
}

/// Costs by degree over the dates of a forecast.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct BandsAnswer {
    /// The caller's unit of cost.
    pub cost_unit: Option<String>,
    /// What today's counts cost.
    pub now: Real,
    /// The date with the largest expected total; null without a date.
    pub peak: Option<String>,
    /// Date by date.
    pub dates: Vec<BandsAtDateAnswer>,
}

/// Costs at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct BandsAtDateAnswer {
    /// The date.
    pub date: String,
    /// All bands together.
    pub total: AmountAnswer,
    /// Band by band, ascending.
    pub bands: Vec<BandAnswer>,
}

/// What one band holds and costs.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct BandAnswer {
    /// Fewest links.
    pub from: u64,
    /// Most links; null: no upper end.
    pub to: Option<u64>,
    /// Expected nodes.
    pub nodes: Real,
    /// Expected link ends of these nodes.
    pub links: Real,
    /// What they cost.
    pub cost: AmountAnswer,
}

/// Watched nodes and classes.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct WatchAnswer {
    /// In the order asked.
    pub nodes: Vec<WatchedNodeAnswer>,
    /// In the order asked.
    pub classes: Vec<WatchedClassAnswer>,
    /// Names of nodes by how likely they are past the highest threshold at the last date, the likeliest first.
    pub likeliest: Vec<String>,
}

/// Where a watched node is going.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct WatchedNodeAnswer {
    /// The caller's name for it.
    pub name: String,
    /// Its degree today.
    pub degree: u64,
    /// Date by date.
    pub dates: Vec<WatchedDegreeAnswer>,
    /// Threshold by threshold; those it has passed already left out.
    pub passing: Vec<PassingAnswer>,
}

/// A watched node's degree at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct WatchedDegreeAnswer {
    /// The date.
    pub date: String,
    /// Probability that the node is still there.
    pub present: Real,
    /// Expected degree, if it is.
    pub expected: Real,
    /// Median degree, if it is.
    pub median: Real,
    /// Central intervals, if it is.
    pub intervals: Vec<IntervalAnswer>,
}

/// How likely a node passes a threshold.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PassingAnswer {
    /// The threshold.
    pub threshold: u64,
    /// Date by date.
    pub dates: Vec<PassedAnswer>,
    /// When it is passed with probability 0.05, 0.5 and 0.95.
    pub crossing: Vec<DateAtAnswer>,
}

/// How likely a node is past a threshold at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PassedAnswer {
    /// The date.
    pub date: String,
    /// Probability of at least so many links then.
    pub at_least: Real,
    /// Probability of as many at some time up to then.
    pub passed: Real,
}

/// Where a class of nodes is going.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct WatchedClassAnswer {
    /// Fewest links today.
    pub from: u64,
    /// Most links today.
    pub to: u64,
    /// Its nodes today.
    pub nodes: u64,
    /// Threshold by threshold; those below its upper end left out.
    pub passing: Vec<ClassPassingAnswer>,
}

/// How many nodes of a class pass a threshold.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ClassPassingAnswer {
    /// The threshold.
    pub threshold: u64,
    /// Date by date.
    pub dates: Vec<ClassPassedAnswer>,
}

/// How many nodes of a class are past a threshold at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ClassPassedAnswer {
    /// The date.
    pub date: String,
    /// Nodes past it then.
    pub at_least: AmountAnswer,
    /// Nodes past it at some time up to then.
    pub passed: AmountAnswer,
}

/// The largest nodes at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct NextHubsAnswer {
    /// The date.
    pub date: String,
    /// Rank by rank, the largest first.
    pub ranks: Vec<HubRankAnswer>,
}

/// The degree of the node of a rank.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct HubRankAnswer {
    /// 1 for the largest.
    pub rank: u64,
    /// The degree of the node of that rank today; null where there are fewer nodes.
    pub now: Option<u64>,
    /// Expected degree.
    pub expected: Real,
    /// As likely to be exceeded as not.
    pub median: Real,
    /// Central intervals, levels ascending.
    pub intervals: Vec<IntervalAnswer>,
}

/// What a what-if would change.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ScenarioAnswer {
    /// The caller's name for it.
    pub name: String,
    /// The largest effect in words.
    pub verdict: String,
    /// Date by date.
    pub dates: Vec<ScenarioAtDateAnswer>,
    /// The limits under it, in the order asked; without rates to sustain.
    pub limits: Vec<LimitAnswer>,
    /// Costs under it; null when none are asked about.
    pub bands: Option<BandsAnswer>,
}

/// A what-if at a date.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ScenarioAtDateAnswer {
    /// The date.
    pub date: String,
    /// Expected nodes.
    pub nodes: Real,
    /// Expected link ends.
    pub links: Real,
    /// Threshold by threshold, ascending.
    pub tail: Vec<TailDifferenceAnswer>,
}

/// How a tail under a what-if differs from the forecast as it stands.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TailDifferenceAnswer {
    /// The threshold.
    pub threshold: u64,
    /// Expected tail under the what-if.
    pub scenario: Real,
    /// Expected tail as it stands.
    pub standing: Real,
    /// What-if less standing: expected, with paired intervals.
    pub difference: AmountAnswer,
    /// Variance of the difference when both are looked at in the same world.
    pub paired_variance: Real,
    /// The same in two independent worlds: what two separate forecasts would leave.
    pub independent_variance: Real,
}

//! Answers to what a planner asks beyond a table of tails.

use jiff::Timestamp;

use super::costs::costs;
use super::hubs::hubs;
use super::limits::limits;
use super::prospect::Prospect;
use super::scenarios::compare;
use super::watched::watched;
use super::{OriginError, OriginRequest};
use crate::forecast::Scenario;
use crate::model::{Change, Interval, Limit, WatchedClass, WatchedNode};

/// Answers to [`crate::model::Questions`].
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Answers {
    /// One a limit, in the order asked.
    pub limits: Vec<LimitAnswer>,
    /// Costs by degree.
    pub bands: Option<BandsAnswer>,
    /// Watched nodes and classes.
    pub watch: Option<WatchAnswer>,
    /// The largest nodes, one entry a date.
    pub next_hubs: Vec<HubsAtDate>,
    /// What-ifs, in the order asked.
    pub scenarios: Vec<ScenarioAnswer>,
}

/// Answers what is asked of `prospect` besides the tails.
pub(super) fn answers(prospect: &Prospect) -> Result<Answers, OriginError> {
    let asked = &prospect.request.questions;
    let standing = Change::none("");
    Ok(Answers {
        limits: limits(prospect, &standing, true)?,
        bands: asked.bands.as_ref().map(|bands| costs(prospect, bands, &standing)).transpose()?,
        watch: asked.watch.as_ref().map(|watch| watched(prospect, watch)).transpose()?,
        next_hubs: hubs(prospect, asked.next_hubs)?,
        scenarios: asked.scenarios.iter().map(|change| compare(prospect, change)).collect::<Result<_, _>>()?,
    })
}

/// Answers the questions of `request` by forces that are given, with what is uncertain of them: nothing is fitted or pooled.
///
/// # Errors
/// When growth cannot be computed; cancellation.
pub fn answers_by(
    request: &OriginRequest,
    scenario: Scenario,
    cancelled: &dyn Fn() -> bool,
) -> Result<Answers, OriginError> {
    let counts = &request.evidence.latest().counts;
    answers(&Prospect { request, counts, scenario, pooled: None, cancelled })
}

/// A probability and the first date by which it is reached; none: not by the farthest date looked at.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct DateAt {
    /// The probability.
    pub probability: f64,
    /// The date.
    pub date: Option<Timestamp>,
}

/// How likely a limit is passed by a date.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LimitAtDate {
    /// The date.
    pub date: Timestamp,
    /// Probability that more nodes than the limit allows are in the tail at the date.
    pub exceeding: f64,
    /// Probability that there were more at some time up to the date: of a first passage.
    pub crossed: f64,
}

/// The largest rate that keeps a risk.
#[derive(Debug, Clone, PartialEq)]
pub struct Sustainable {
    /// The rate: arrivals a day over the time up to the limit's date, on average, or links per arrival; none when no rate keeps
    /// the risk or every rate does.
    pub rate: Option<f64>,
    /// The same over the rate that is expected or given.
    pub factor: Option<f64>,
    /// Were the forces known exactly, the largest rate would lie in this with probability 0.9.
    pub interval: Option<Interval>,
    /// In words; where there is no rate, what comes nearest.
    pub detail: String,
}

/// Where a limit stands.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitAnswer {
    /// The limit.
    pub limit: Limit,
    /// Nodes in the tail today.
    pub now: u64,
    /// How many more are allowed; negative when the limit is passed already.
    pub headroom: f64,
    /// Whether nodes in the tail stay in it, so that being above the limit and having crossed it are one.
    pub monotone: bool,
    /// By date: the forecast's dates and the limit's own.
    pub dates: Vec<LimitAtDate>,
    /// At the limit's own date.
    pub at_by: LimitAtDate,
    /// When the limit is crossed with probability 0.05, 0.5 and 0.95.
    pub crossing: Vec<DateAt>,
    /// When the probability of a crossing reaches the risk.
    pub risk_reached: DateAt,
    /// Days until then.
    pub days_left: Option<f64>,
    /// The largest arrival rate that keeps the risk.
    pub arrivals: Sustainable,
    /// The largest number of links per arrival that keeps the risk.
    pub links_per_arrival: Sustainable,
    /// In words.
    pub verdict: String,
}

/// An amount with its central intervals.
#[derive(Debug, Clone, PartialEq)]
pub struct AmountForecast {
    /// Expected amount.
    pub expected: f64,
    /// Central intervals, ascending in level.
    pub intervals: Vec<Interval>,
}

/// What one band holds and costs.
#[derive(Debug, Clone, PartialEq)]
pub struct BandAmounts {
    /// Fewest links.
    pub from: u64,
    /// Most links; none: no upper end.
    pub to: Option<u64>,
    /// Expected nodes.
    pub nodes: f64,
    /// Expected link ends of these nodes.
    pub links: f64,
    /// What they cost.
    pub cost: AmountForecast,
}

/// Costs at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct BandsAtDate {
    /// The date.
    pub date: Timestamp,
    /// All bands together.
    pub total: AmountForecast,
    /// Band by band, ascending.
    pub bands: Vec<BandAmounts>,
}

/// Costs by degree over the dates of a forecast.
#[derive(Debug, Clone, PartialEq)]
pub struct BandsAnswer {
    /// The caller's unit.
    pub unit: Option<String>,
    /// What today's counts cost.
    pub now: f64,
    /// Date by date.
    pub dates: Vec<BandsAtDate>,
    /// Index of the date with the largest expected total.
    pub peak: usize,
}

/// How likely a node passes a threshold.
#[derive(Debug, Clone, PartialEq)]
pub struct Passing {
    /// The threshold.
    pub threshold: u64,
    /// By date: probability of having at least so many links then, and of having had them at some time up to then.
    pub dates: Vec<PassedAtDate>,
    /// When it is passed with probability 0.05, 0.5 and 0.95.
    pub crossing: Vec<DateAt>,
}

/// How likely a node is past a threshold at a date.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PassedAtDate {
    /// The date.
    pub date: Timestamp,
    /// Probability of at least so many links then.
    pub at_least: f64,
    /// Probability of as many at some time up to then.
    pub passed: f64,
}

/// A degree at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct DegreeAtDate {
    /// The date.
    pub date: Timestamp,
    /// Probability that the node is still there.
    pub present: f64,
    /// Expected degree, if it is.
    pub expected: f64,
    /// Median degree, if it is.
    pub median: f64,
    /// Central intervals, if it is.
    pub intervals: Vec<Interval>,
}

/// Where a watched node is going.
#[derive(Debug, Clone, PartialEq)]
pub struct NodeAnswer {
    /// The node.
    pub node: WatchedNode,
    /// Date by date.
    pub dates: Vec<DegreeAtDate>,
    /// Threshold by threshold; those it has passed already left out.
    pub passing: Vec<Passing>,
}

/// How many nodes of a class pass a threshold.
#[derive(Debug, Clone, PartialEq)]
pub struct ClassPassing {
    /// The threshold.
    pub threshold: u64,
    /// By date: nodes of the class with at least so many links then, and that have had them at some time up to then.
    pub dates: Vec<ClassAtDate>,
}

/// How many nodes of a class are past a threshold at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct ClassAtDate {
    /// The date.
    pub date: Timestamp,
    /// Nodes past it then.
    pub at_least: AmountForecast,
    /// Nodes past it at some time up to then.
    pub passed: AmountForecast,
}

/// Where a class of nodes is going.
#[derive(Debug, Clone, PartialEq)]
pub struct ClassAnswer {
    /// The class.
    pub class: WatchedClass,
    /// Its nodes today.
    pub nodes: u64,
    /// Threshold by threshold; those below the class's upper end left out.
    pub passing: Vec<ClassPassing>,
}

/// Watched nodes and classes.
#[derive(Debug, Clone, PartialEq)]
pub struct WatchAnswer {
    /// In the order asked.
    pub nodes: Vec<NodeAnswer>,
    /// In the order asked.
    pub classes: Vec<ClassAnswer>,
    /// Names of nodes by how likely they are past the highest threshold at the last date, the likeliest first.
    pub likeliest: Vec<String>,
}

/// The largest nodes at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct HubsAtDate {
    /// The date.
    pub date: Timestamp,
    /// Rank by rank, the largest first.
    pub ranks: Vec<HubRank>,
}

/// The degree of the node of a rank.
#[derive(Debug, Clone, PartialEq)]
pub struct HubRank {
    /// 1 for the largest.
    pub rank: usize,
    /// The degree of the node of that rank today; none where there are fewer nodes.
    pub now: Option<u64>,
    /// Expected degree.
    pub expected: f64,
    /// Median degree.
    pub median: f64,
    /// Central intervals.
    pub intervals: Vec<Interval>,
}

/// How a tail under a scenario differs from the forecast as it stands.
#[derive(Debug, Clone, PartialEq)]
pub struct TailDifference {
    /// The threshold.
    pub threshold: u64,
    /// Expected tail under the scenario.
    pub scenario: f64,
    /// Expected tail as it stands.
    pub standing: f64,
    /// Expected difference, scenario less standing, with its paired intervals.
    pub difference: AmountForecast,
    /// Variance of the difference when both are looked at in the same world.
    pub paired_variance: f64,
    /// The same in two independent worlds: what two separate forecasts would leave.
    pub independent_variance: f64,
}

/// A what-if at a date.
#[derive(Debug, Clone, PartialEq)]
pub struct ScenarioAtDate {
    /// The date.
    pub date: Timestamp,
    /// Expected nodes.
    pub nodes: f64,
    /// Expected link ends.
    pub links: f64,
    /// Threshold by threshold, ascending.
    pub tail: Vec<TailDifference>,
}

/// What a what-if would change.
#[derive(Debug, Clone, PartialEq)]
pub struct ScenarioAnswer {
    /// The caller's name for it.
    pub name: String,
    /// Date by date.
    pub dates: Vec<ScenarioAtDate>,
    /// The limits under it, in the order asked; without rates to sustain.
    pub limits: Vec<LimitAnswer>,
    /// Costs under it.
    pub bands: Option<BandsAnswer>,
    /// The largest effect in words.
    pub verdict: String,
}

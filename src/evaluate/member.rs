//! What a pooled forecast is made of: mechanisms, mechanisms corrected by their last flows, and plain trends.

use crate::fit::Model;

/// A plain trend of one tail: its last step carried forward.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Trend {
    /// In proportion to arrivals.
    PerArrival,
    /// In proportion to link ends gained by the network.
    PerLink,
    /// In proportion to time.
    PerDay,
    /// Linear in ln S against ln N.
    LogNodes,
}

/// One way to forecast a tail size.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Member {
    /// By a candidate's law.
    Mechanism(Model),
    /// The same, each flow past a threshold multiplied by what came over what the law expected in the newest period.
    Corrected(Model),
    /// By a plain trend.
    Trend(Trend),
}

impl Trend {
    /// Every plain trend.
    pub const ALL: [Self; 4] = [Self::PerArrival, Self::PerLink, Self::PerDay, Self::LogNodes];

    /// Whether it may be part of a pool. The others are baselines: carried on in ln N a trend runs away, and per day it does
    /// not know the arrivals.
    pub fn is_pooled(self) -> bool {
        matches!(self, Self::PerArrival | Self::PerLink)
    }

    /// The tail size at a later date, at least 0.
    ///
    /// Formula: `S + (S − S')·x`, x the growth ahead over that of the newest period in what the trend goes by; `S·(S/S')^x` with x
    /// the growth of ln N over that of the newest period for [`Self::LogNodes`]. Where the newest period shows no growth in what
    /// the trend goes by, `S`.
    pub fn size(self, step: &Step, ahead: &Totals) -> f64 {
        let (past, next) = match self {
            Self::PerArrival => (step.now.nodes - step.before.nodes, ahead.nodes - step.now.nodes),
            Self::PerLink => (step.now.link_ends - step.before.link_ends, ahead.link_ends - step.now.link_ends),
            Self::PerDay => (step.now.day - step.before.day, ahead.day - step.now.day),
            Self::LogNodes => ((step.now.nodes / step.before.nodes).ln(), (ahead.nodes / step.now.nodes).ln()),
        };
        if !(past > 0.0 && next.is_finite()) {
            return step.size;
        }
        let x = next / past;
        let carried = match self {
            Self::LogNodes => {
                let (before, now) = (step.size_before.max(HALF_A_NODE), step.size.max(HALF_A_NODE));
                now * (x * (now / before).ln()).min(MOST_LOG_GROWTH).exp()
            }
            _ => step.size + (step.size - step.size_before) * x,
        };
        carried.max(0.0)
    }
}

/// A tail of no node counts as half of one where logarithms are taken.
pub(super) const HALF_A_NODE: f64 = 0.5;
/// A trend in logarithms ends where a tail has grown by this, e^20.
const MOST_LOG_GROWTH: f64 = 20.0;

/// A network's totals on a day.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Totals {
    /// Day, on any clock that all totals share.
    pub day: f64,
    /// N.
    pub nodes: f64,
    /// K.
    pub link_ends: f64,
}

/// The newest period of one tail.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Step {
    /// Totals at its start.
    pub before: Totals,
    /// Totals at its end, the origin.
    pub now: Totals,
    /// Tail size at its start.
    pub size_before: f64,
    /// Tail size at the origin.
    pub size: f64,
}

impl Member {
    /// Its name as callers read it.
    pub fn name(self) -> &'static str {
        match self {
            Self::Mechanism(model) => model.name(),
            Self::Corrected(Model::Uniform) => "uniform_flow_corrected",
            Self::Corrected(Model::Preferential) => "preferential_flow_corrected",
            Self::Corrected(Model::Mix) => "mix_flow_corrected",
            Self::Corrected(Model::Power) => "power_flow_corrected",
            Self::Corrected(Model::Dormancy) => "dormancy_flow_corrected",
            Self::Corrected(Model::GrowthVariance) => "growth_variance_flow_corrected",
            Self::Trend(Trend::PerArrival) => "trend_per_arrival",
            Self::Trend(Trend::PerLink) => "trend_per_link",
            Self::Trend(Trend::PerDay) => "trend_per_day",
            Self::Trend(Trend::LogNodes) => "trend_log_nodes",
        }
    }

    /// Every member, in the order in which they are listed.
    pub fn all() -> impl Iterator<Item = Self> {
        let mechanisms = Model::ALL.into_iter().flat_map(|model| [Self::Mechanism(model), Self::Corrected(model)]);
        mechanisms.chain(Trend::ALL.into_iter().map(Self::Trend))
    }
}

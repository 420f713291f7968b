//! Answers to what is asked besides the tails, in the answers' words.

use jiff::{Timestamp, Unit};

use super::intervals;
use crate::evaluate::{self, AmountForecast, DateAt};
use crate::service::answers::{
    AmountAnswer, BandAnswer, BandsAnswer, BandsAtDateAnswer, ClassPassedAnswer, ClassPassingAnswer, DateAtAnswer,
    HubRankAnswer, IntervalAnswer, LimitAnswer, LimitAtDateAnswer, NextHubsAnswer, PassedAnswer, PassingAnswer,
    ScenarioAnswer, ScenarioAtDateAnswer, SustainableAnswer, TailDifferenceAnswer, WatchAnswer, WatchedClassAnswer,
    WatchedDegreeAnswer, WatchedNodeAnswer,
};
use crate::service::{Count, Real, date_text};

/// Every item in the answers' words.
pub fn each<'a, T, A: From<&'a T>>(items: &'a [T]) -> Vec<A> {
    items.iter().map(A::from).collect()
}

impl From<&evaluate::LimitAnswer> for LimitAnswer {
    fn from(found: &evaluate::LimitAnswer) -> Self {
        let limit = &found.limit;
        Self {
            name: limit.name().map(str::to_owned),
            threshold: limit.threshold(),
            max_nodes: limit.max_nodes(),
            by: date_text(limit.by()),
            risk: Real(limit.risk()),
            now: found.now,
            headroom: Count(found.headroom),
            monotone: found.monotone,
            dates: each(&found.dates),
            at_by: (&found.at_by).into(),
            crossing: each(&found.crossing),
            risk_reached: (&found.risk_reached).into(),
            days_left: found.days_left.map(Real),
            arrivals: (&found.arrivals).into(),
            links_per_arrival: (&found.links_per_arrival).into(),
            verdict: found.verdict.clone(),
        }
    }
}

impl From<&evaluate::LimitAtDate> for LimitAtDateAnswer {
    fn from(at: &evaluate::LimitAtDate) -> Self {
        Self { date: date_text(at.date), exceeding: Real(at.exceeding), crossed: Real(at.crossed) }
    }
}

impl From<&DateAt> for DateAtAnswer {
    fn from(at: &DateAt) -> Self {
        // Dates between those asked are interpolated: nanoseconds would say what nobody knows.
        let moment = |time: Timestamp| date_text(time.round(Unit::Second).unwrap_or(time));
        Self { probability: Real(at.probability), date: at.date.map(moment) }
    }
}

impl From<&evaluate::Sustainable> for SustainableAnswer {
    fn from(found: &evaluate::Sustainable) -> Self {
        let interval =
            |i: &crate::model::Interval| IntervalAnswer { level: Real(i.level), low: Real(i.low), high: Real(i.high) };
        Self {
            rate: found.rate.map(Real),
            factor: found.factor.map(Real),
            interval: found.interval.as_ref().map(interval),
            detail: found.detail.clone(),
        }
    }
}

impl From<&AmountForecast> for AmountAnswer {
    fn from(amount: &AmountForecast) -> Self {
        Self { expected: Real(amount.expected), intervals: intervals(&amount.intervals) }
    }
}

impl From<&evaluate::BandsAnswer> for BandsAnswer {
    fn from(found: &evaluate::BandsAnswer) -> Self {
        Self {
            cost_unit: found.unit.clone(),
            now: Real(found.now),
            peak: found.dates.get(found.peak).map(|at| date_text(at.date)),
            dates: each(&found.dates),
        }
    }
}

impl From<&evaluate::BandsAtDate> for BandsAtDateAnswer {
    fn from(at: &evaluate::BandsAtDate) -> Self {
        Self { date: date_text(at.date), total: (&at.total).into(), bands: each(&at.bands) }
    }
}

impl From<&evaluate::BandAmounts> for BandAnswer {
    fn from(band: &evaluate::BandAmounts) -> Self {
        let cost = (&band.cost).into();
        Self { from: band.from, to: band.to, nodes: Real(band.nodes), links: Real(band.links), cost }
    }
}

impl From<&evaluate::WatchAnswer> for WatchAnswer {
    fn from(found: &evaluate::WatchAnswer) -> Self {
        Self { nodes: each(&found.nodes), classes: each(&found.classes), likeliest: found.likeliest.clone() }
    }
}

impl From<&evaluate::NodeAnswer> for WatchedNodeAnswer {
    fn from(found: &evaluate::NodeAnswer) -> Self {
        Self {
            name: found.node.name.clone(),
            degree: found.node.degree,
            dates: each(&found.dates),
            passing: each(&found.passing),
        }
    }
}

impl From<&evaluate::DegreeAtDate> for WatchedDegreeAnswer {
    fn from(at: &evaluate::DegreeAtDate) -> Self {
        Self {
            date: date_text(at.date),
            present: Real(at.present),
            expected: Real(at.expected),
            median: Real(at.median),
            intervals: intervals(&at.intervals),
        }
    }
}

impl From<&evaluate::Passing> for PassingAnswer {
    fn from(found: &evaluate::Passing) -> Self {
        Self { threshold: found.threshold, dates: each(&found.dates), crossing: each(&found.crossing) }
    }
}

impl From<&evaluate::PassedAtDate> for PassedAnswer {
    fn from(at: &evaluate::PassedAtDate) -> Self {
        Self { date: date_text(at.date), at_least: Real(at.at_least), passed: Real(at.passed) }
    }
}

impl From<&evaluate::ClassAnswer> for WatchedClassAnswer {
    fn from(found: &evaluate::ClassAnswer) -> Self {
        Self { from: found.class.from, to: found.class.to, nodes: found.nodes, passing: each(&found.passing) }
    }
}

impl From<&evaluate::ClassPassing> for ClassPassingAnswer {
    fn from(found: &evaluate::ClassPassing) -> Self {
        Self { threshold: found.threshold, dates: each(&found.dates) }
    }
}

impl From<&evaluate::ClassAtDate> for ClassPassedAnswer {
    fn from(at: &evaluate::ClassAtDate) -> Self {
        Self { date: date_text(at.date), at_least: (&at.at_least).into(), passed: (&at.passed).into() }
    }
}

impl From<&evaluate::HubsAtDate> for NextHubsAnswer {
    fn from(at: &evaluate::HubsAtDate) -> Self {
        Self { date: date_text(at.date), ranks: each(&at.ranks) }
    }
}

impl From<&evaluate::HubRank> for HubRankAnswer {
    fn from(hub: &evaluate::HubRank) -> Self {
        Self {
            rank: hub.rank as u64,
            now: hub.now,
            expected: Real(hub.expected),
            median: Real(hub.median),
            intervals: intervals(&hub.intervals),
        }
    }
}

impl From<&evaluate::ScenarioAnswer> for ScenarioAnswer {
    fn from(found: &evaluate::ScenarioAnswer) -> Self {
        Self {
            name: found.name.clone(),
            verdict: found.verdict.clone(),
            dates: each(&found.dates),
            limits: each(&found.limits),
            bands: found.bands.as_ref().map(BandsAnswer::from),
        }
    }
}

impl From<&evaluate::ScenarioAtDate> for ScenarioAtDateAnswer {
    fn from(at: &evaluate::ScenarioAtDate) -> Self {
        Self { date: date_text(at.date), nodes: Real(at.nodes), links: Real(at.links), tail: each(&at.tail) }
    }
}

impl From<&evaluate::TailDifference> for TailDifferenceAnswer {
    fn from(found: &evaluate::TailDifference) -> Self {
        Self {
            threshold: found.threshold,
            scenario: Real(found.scenario),
            standing: Real(found.standing),
            difference: (&found.difference).into(),
            paired_variance: Real(found.paired_variance),
            independent_variance: Real(found.independent_variance),
        }
    }
}

//! The pooled forecast from the newest snapshot on.

use jiff::Timestamp;

use super::ahead::GivenRates;
use super::backtest::{Replay, law, pooled_tail, replay};
use super::member::Member;
use super::pool::{FEWEST_NODES, Pool};
use super::record::{Growth, OriginRecord, RecordPlan, Scene, record};
use super::spread::Spread;
use super::{OriginError, OriginRequest};
use crate::forecast::TailLaw;
use crate::model::{DegreeCounts, Evidence, ForecastPlan};

/// Periods ahead that are scored; farther dates go by the farthest.
pub const SCORED_AHEAD: usize = 3;
/// Origins that are scored, the newest ones: older ones would weigh less than 2 % of the newest.
const MOST_ORIGINS: usize = 12;
/// Thresholds that are scored at most.
const MOST_THRESHOLDS: usize = 16;
/// Periods that a typical one is taken over.
const TYPICAL_OVER: usize = 3;

/// How members were weighed for dates so many periods ahead.
#[derive(Debug, Clone, PartialEq)]
pub struct PoolUse {
    /// Periods ahead, a whole number.
    pub ahead: f64,
    /// The members and their weights.
    pub pool: Pool,
    /// What the record makes of the variance there.
    pub spread: Spread,
}

impl PoolUse {
    /// What weights and intervals stand on.
    pub fn in_words(&self) -> String {
        let heaviest = self.pool.shares.first().map(|share| share.member);
        let name = heaviest.map_or("none", Member::name);
        let error = 100.0 * self.spread.flow_error;
        if self.pool.scored == 0 {
            return format!(
                "this network has no record of past forecasts yet, so members are weighed by how well each explains the newest \
                 period (heaviest: {name}), and intervals allow {error:.0} % of each flow past a threshold for model error, a \
                 stated default, and what the members disagree by"
            );
        }
        let leads = match heaviest {
            Some(Member::Trend(_)) => {
                "; a plain trend has done better here than any law of attachment, and the forecast leans on it"
            }
            _ => "",
        };
        format!(
            "members are weighed by how their forecasts of {} past dates did (heaviest: {name}); by the same record intervals allow \
             {error:.0} % of each flow past a threshold for model error and are scaled by {:.2}{leads}",
            self.pool.scored,
            self.spread.scale.sqrt()
        )
    }
}

/// The pooled forecast from the newest snapshot on: members fitted, weighed, and ready for any date and threshold.
pub(super) struct PooledOutlook<'a> {
    request: &'a OriginRequest,
    replay: Replay,
    scene: Scene<'a>,
    period: f64,
    /// The pools, nearest first.
    uses: Vec<PoolUse>,
}

impl RecordPlan {
    /// What records are to hold to weigh the members of a forecast: up to 16 of its thresholds past which there are nodes enough
    /// to score; where there is none, 1, 2, 5, 10, … as far as there are.
    pub fn for_forecast(request: &OriginRequest) -> Self {
        let counts = &request.evidence.latest().counts;
        let enough = |threshold: &u64| counts.tail_size(*threshold) as f64 >= FEWEST_NODES;
        let asked: Vec<u64> = request.plan.thresholds().iter().copied().filter(enough).collect();
        let found = if asked.is_empty() { round_degrees(counts) } else { asked };
        let thinned = |i: usize| found.get(i * (found.len() - 1) / (MOST_THRESHOLDS - 1)).copied();
        let thresholds = match found.len() {
            n if n > MOST_THRESHOLDS => (0..MOST_THRESHOLDS).filter_map(thinned).collect(),
            _ => found,
        };
        // Where rates are to be expected, what expecting them cost before tells how far to trust it.
        let expected = request.arrivals.is_none() || request.fit.links_per_arrival.is_none();
        Self { thresholds, ahead: SCORED_AHEAD, expected, fit: request.fit.clone() }
    }
}

/// 1, 2, 5, 10, … as long as enough nodes have as many links.
fn round_degrees(counts: &DegreeCounts) -> Vec<u64> {
    let decades = std::iter::successors(Some(1u64), |decade| decade.checked_mul(10));
    let degrees = decades.flat_map(|decade| [decade, decade.saturating_mul(2), decade.saturating_mul(5)]);
    degrees.take_while(|&degree| counts.tail_size(degree) as f64 >= FEWEST_NODES).collect()
}

/// Origins (indices of snapshots) whose forecasts the newest snapshot can score, oldest first.
pub fn scored_origins(evidence: &Evidence) -> std::ops::Range<usize> {
    let newest = evidence.snapshots().len().saturating_sub(1);
    newest.saturating_sub(MOST_ORIGINS).max(1)..newest.max(1)
}

/// The records that weigh a forecast's members.
///
/// # Errors
/// Cancellation.
pub fn past_records(request: &OriginRequest, cancelled: &dyn Fn() -> bool) -> Result<Vec<OriginRecord>, OriginError> {
    let plan = RecordPlan::for_forecast(request);
    scored_origins(&request.evidence).map(|origin| record(&request.evidence, origin, &plan, cancelled)).collect()
}

impl<'a> PooledOutlook<'a> {
    /// Weighs the members by `past` for dates so many `days` ahead, and keeps those in use there.
    ///
    /// # Errors
    /// Cancellation; a single snapshot.
    pub fn new(
        request: &'a OriginRequest,
        past: &[OriginRecord],
        days: &[f64],
        cancelled: &'a dyn Fn() -> bool,
    ) -> Result<Self, OriginError> {
        let evidence = &request.evidence;
        let observed = |date: Timestamp, threshold: u64| {
            let found = evidence.snapshots().binary_search_by_key(&date, |snapshot| snapshot.as_of).ok()?;
            Some(evidence.snapshots()[found].counts.tail_size(threshold) as f64)
        };
        let replay = replay(past, &observed);
        let period = typical_period(evidence);
        let mut scene = Scene::new(evidence, &request.fit, cancelled)?;
        // Members are weighed by the thresholds that were scored, in hindsight too.
        let weighed_by = scene.record(&RecordPlan::for_forecast(request).thresholds, Vec::new())?;
        let growth = growth_of(&given_by(request));
        let mut uses: Vec<PoolUse> = Vec::new();
        for &day in days {
            let ahead = periods_ahead(day, period);
            if uses.iter().all(|used| used.ahead != ahead) {
                uses.push(PoolUse {
                    ahead,
                    pool: replay.pool(&weighed_by, ahead),
                    spread: replay.spread(ahead, growth),
                });
            }
        }
        uses.sort_by(|a, b| a.ahead.total_cmp(&b.ahead));
        let in_use = |model| {
            let own = [Member::Mechanism(model), Member::Corrected(model)];
            uses.iter().flat_map(|used| &used.pool.shares).any(|share| own.contains(&share.member))
        };
        scene.keep(in_use);
        let last = request.plan.dates().last().copied();
        if last.is_none_or(|last| scene.targets(last, 1.0, &given_by(request)).is_empty()) {
            return Err(OriginError::NoPeriod);
        }
        Ok(Self { request, replay, scene, period, uses })
    }

    /// The laws of the tails of `plan`, by the rates of the request or others: one list a date, one law a threshold.
    ///
    /// # Errors
    /// Cancellation; no candidate.
    pub fn tails(&self, plan: &ForecastPlan, given: &GivenRates) -> Result<Vec<Vec<TailLaw>>, OriginError> {
        let dates = plan.dates().iter().zip(plan.days());
        let targets = dates.flat_map(|(&date, &day)| self.scene.targets(date, day / self.period, given)).collect();
        let newest = self.scene.record(plan.thresholds(), targets)?;
        let growth = growth_of(given);
        let at = |(&date, &day): (&Timestamp, &f64)| {
            let outlook = newest.outlooks.iter().find(|o| o.target.date == date && o.target.growth == growth);
            let wanted = periods_ahead(day, self.period);
            let away = |used: &&PoolUse| (used.ahead - wanted).abs();
            let used = self.uses.iter().min_by(|a, b| away(a).total_cmp(&away(b)));
            let (Some(outlook), Some(used)) = (outlook, used) else { return Err(OriginError::NoPeriod) };
            Ok(tails_at(&newest, outlook, &used.pool, &self.replay))
        };
        plan.dates().iter().zip(plan.days()).map(at).collect()
    }

    /// The pools in use at so many days ahead.
    pub fn uses_at(&self, days: &[f64]) -> Vec<PoolUse> {
        let ahead = |used: &&PoolUse| days.iter().any(|&day| periods_ahead(day, self.period) == used.ahead);
        self.uses.iter().filter(ahead).cloned().collect()
    }

    /// The rates that the request gives.
    pub fn given(&self) -> GivenRates {
        given_by(self.request)
    }

    /// Relative error of the flow past a threshold so many days ahead, as the record has it.
    pub fn flow_error(&self, day: f64) -> f64 {
        let spread = self.replay.spread(day / self.period, growth_of(&self.given()));
        spread.flow_error * spread.scale.sqrt()
    }
}

fn given_by(request: &OriginRequest) -> GivenRates {
    GivenRates {
        arrivals: request.arrivals.clone(),
        links_per_arrival: request.fit.links_per_arrival,
        links_per_node_day: request.fit.links_per_node_day,
        ..GivenRates::default()
    }
}

/// Whether the totals ahead are known or expected.
fn growth_of(given: &GivenRates) -> Growth {
    let known = given.arrivals.is_some() && given.links_per_arrival.is_some();
    if known { Growth::Known } else { Growth::Expected }
}

/// Whole periods ahead as members are weighed for them.
fn periods_ahead(day: f64, period: f64) -> f64 {
    (day / period).round().clamp(1.0, SCORED_AHEAD as f64)
}

/// Mean length of the newest periods, days.
fn typical_period(evidence: &Evidence) -> f64 {
    let days: Vec<f64> = evidence.periods().rev().take(TYPICAL_OVER).map(|(.., days)| days).collect();
    days.iter().sum::<f64>() / days.len().max(1) as f64
}

fn tails_at(record: &OriginRecord, outlook: &super::Outlook, pool: &Pool, replay: &Replay) -> Vec<TailLaw> {
    let spread = replay.spread(outlook.target.ahead, outlook.target.growth);
    let row = |(j, &threshold): (usize, &u64)| {
        let tail = pooled_tail(record, outlook, pool, j)?;
        let law = law(record, &tail, &spread);
        Some(TailLaw { threshold, now: record.sizes.get(j)?.1, law, chance: tail.chance.min(law.rest().variance) })
    };
    record.thresholds.iter().enumerate().filter_map(row).collect()
}

//! Pools the members by their record on the network (geometric pooling: Bates & Granger 1969 for weights by past error).

use jiff::Timestamp;

use super::backtest::Observed;
use super::member::{HALF_A_NODE, Member};
use super::record::{Growth, OriginRecord, Outlook};
use super::scores::log_error;
use crate::fit::Model;

/// Weight of a score from one more period back.
pub(super) const DECAY: f64 = 0.7;
/// Weight of scores at other horizons than the one asked for.
pub(super) const OTHER_HORIZON: f64 = 0.5;
/// Weights fall with this power of the score.
const POWER: i32 = 4;
/// Tails of fewer nodes do not score.
pub(super) const FEWEST_NODES: f64 = 5.0;
/// Weight of the hindsight score, in scored dates.
const HINDSIGHT: f64 = 0.5;
/// Relative error of a flow by a mechanism that is taken for granted, however well it fits in hindsight.
const MECHANISM_ERROR: f64 = 0.15;
/// The same for a corrected mechanism and a trend.
const TREND_ERROR: f64 = 0.2;
/// Added to scores: a member that was right by chance once does not take all.
const SCORE_FLOOR: f64 = 1e-3;
/// Members of less weight are left out.
pub(super) const LEAST_WEIGHT: f64 = 0.01;

/// One member of a pool.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PoolShare {
    /// The member.
    pub member: Member,
    /// Mean of |ln(forecast/observed)|·√observed over its record, lower is better: about 0.8 where only chance is at work.
    pub score: f64,
    /// Its weight; weights add up to one.
    pub weight: f64,
}

/// How members are weighed at one origin and horizon.
#[derive(Debug, Clone, PartialEq)]
pub struct Pool {
    /// Dates whose outcome the members were scored on; none, and the weights go by hindsight alone.
    pub scored: usize,
    /// The members, heaviest first.
    pub shares: Vec<PoolShare>,
}

/// What every member's forecast of one date came to.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct DateScore {
    /// Place of the origin among the records.
    origin: usize,
    /// Periods ahead.
    ahead: f64,
    /// The date.
    date: Timestamp,
    /// Mean of |ln(forecast/observed)|·√observed over thresholds with at least 5 nodes.
    scores: Vec<(Member, f64)>,
}

/// The scores of the dates that the record at place `origin` looks ahead to by known totals, and that have been observed.
pub(super) fn date_scores(origin: usize, record: &OriginRecord, observed: &Observed) -> Vec<DateScore> {
    let known = record.outlooks.iter().filter(|outlook| outlook.target.growth == Growth::Known);
    let score = |outlook: &Outlook| {
        let scores = scores(record, outlook, observed);
        let (ahead, date) = (outlook.target.ahead, outlook.target.date);
        (!scores.is_empty()).then_some(DateScore { origin, ahead, date, scores })
    };
    known.filter_map(score).collect()
}

/// Weighs the members at the origin of `record`, at place `origin` among the records one a period, for dates `ahead` periods away, by
/// what had come of earlier forecasts (`past`) by then.
///
/// Formula: score = Σ a·m/Σ a over the scored dates, m the mean of |ln(forecast/observed)|·√observed over thresholds with at
/// least 5 nodes, a = 0.7^age, halved at other horizons. One more score, of half a date's weight, is what each member made of the
/// newest period in hindsight, at least 15 % of its flow for a mechanism and 20 % for its corrected form or a trend: without a
/// record, mechanisms go before trends unless they miss the very flows they were fitted to. Weight ∝ score⁻⁴.
pub(super) fn pool(record: &OriginRecord, origin: usize, past: &[DateScore], ahead: f64) -> Pool {
    let mut sums: Vec<(Member, f64, f64)> = Member::all().filter(|m| is_pooled(*m)).map(|m| (m, 0.0, 0.0)).collect();
    let mut add = |scores: &[(Member, f64)], weight: f64| {
        for (member, score, total) in &mut sums {
            if let Some(&(_, own)) = scores.iter().find(|(m, _)| m == member) {
                *score += weight * own;
                *total += weight;
            }
        }
    };
    let mut scored = 0;
    for date in past.iter().filter(|date| date.date <= record.as_of) {
        let age = (origin as f64 - date.origin as f64 - date.ahead).max(0.0);
        let same = date.ahead.round() == ahead.round();
        add(&date.scores, DECAY.powf(age) * if same { 1.0 } else { OTHER_HORIZON });
        scored += 1;
    }
    add(&hindsight(record), HINDSIGHT);
    let mut shares: Vec<PoolShare> = sums
        .into_iter()
        .filter(|&(_, _, total)| total > 0.0)
        .map(|(member, score, total)| {
            let score = score / total;
            PoolShare { member, score, weight: (score + SCORE_FLOOR).powi(-POWER) }
        })
        .collect();
    normalise(&mut shares);
    shares.retain(|share| share.weight >= LEAST_WEIGHT);
    normalise(&mut shares);
    shares.sort_by(|a, b| b.weight.total_cmp(&a.weight));
    Pool { scored, shares }
}

fn normalise(shares: &mut [PoolShare]) {
    let total: f64 = shares.iter().map(|share| share.weight).sum();
    shares.iter_mut().for_each(|share| share.weight /= total);
}

fn is_pooled(member: Member) -> bool {
    match member {
        Member::Trend(trend) => trend.is_pooled(),
        Member::Mechanism(_) | Member::Corrected(_) => true,
    }
}

/// What `pool` makes of the members' `sizes`: exp Σ w·ln(size) over those there are; none without any.
pub fn pooled_size(pool: &Pool, sizes: &[(Member, f64)]) -> Option<f64> {
    let (mut sum, mut total) = (0.0, 0.0);
    for share in &pool.shares {
        if let Some(&(_, size)) = sizes.iter().find(|(member, _)| *member == share.member) {
            sum += share.weight * size.max(HALF_A_NODE).ln();
            total += share.weight;
        }
    }
    (total > 0.0).then(|| (sum / total).exp())
}

/// Every member's mean score at one date that has come.
fn scores(record: &OriginRecord, outlook: &Outlook, observed: &Observed) -> Vec<(Member, f64)> {
    let mut means = Means::default();
    for (j, &threshold) in record.thresholds.iter().enumerate() {
        let Some(came) = observed(outlook.target.date, threshold).filter(|&came| came >= FEWEST_NODES) else {
            continue;
        };
        for (member, size) in record.members(outlook, j) {
            means.add(member, log_error(size, came).abs() * came.sqrt());
        }
    }
    means.take()
}

/// Every member's score on the newest period in hindsight, floored.
fn hindsight(record: &OriginRecord) -> Vec<(Member, f64)> {
    let mut means = Means::default();
    for (j, &(before, now)) in record.sizes.iter().enumerate() {
        if now < FEWEST_NODES {
            continue;
        }
        let flow = (now - record.kept(Model::Mix, j).unwrap_or(before)).abs() / now;
        for &model in &record.models {
            let Some(misfit) = record.misfit(model, j) else { continue };
            means.add(Member::Mechanism(model), misfit.max(MECHANISM_ERROR * flow) * now.sqrt());
            means.add(Member::Corrected(model), misfit.max(TREND_ERROR * flow) * now.sqrt());
        }
        for member in Member::all().filter(|&m| matches!(m, Member::Trend(_)) && is_pooled(m)) {
            means.add(member, TREND_ERROR * flow * now.sqrt());
        }
    }
    means.take()
}

/// Running means, one a member.
#[derive(Default)]
struct Means(Vec<(Member, f64, f64)>);

impl Means {
    fn add(&mut self, member: Member, value: f64) {
        match self.0.iter_mut().find(|(m, ..)| *m == member) {
            Some((_, sum, count)) => (*sum, *count) = (*sum + value, *count + 1.0),
            None => self.0.push((member, value, 1.0)),
        }
    }

    fn take(self) -> Vec<(Member, f64)> {
        self.0.into_iter().map(|(member, sum, count)| (member, sum / count)).collect()
    }
}

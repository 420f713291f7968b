//! Rolling origins: what would have been forecast at each, and what came.

use jiff::Timestamp;

use super::member::Member;
use super::pool::{DateScore, Pool, date_scores, pool, pooled_size};
use super::record::{Growth, OriginRecord, Outlook, Rate};
use super::spread::{Miss, PooledTail, Spread, miss, spread};
use crate::fit::Model;
use crate::forecast::CountLaw;

/// One forecast that came due.
#[derive(Debug, Clone, PartialEq)]
pub struct Case {
    /// Where it was made.
    pub origin: Timestamp,
    /// The date it was made for.
    pub date: Timestamp,
    /// Periods ahead.
    pub ahead: u32,
    /// Whether the totals were those that came, or those expected at the origin.
    pub growth: Growth,
    /// Threshold.
    pub threshold: u64,
    /// The tail that came.
    pub observed: f64,
    /// The pooled forecast's middle.
    pub pooled: f64,
    /// The pooled forecast's law.
    pub law: CountLaw,
    /// Every member's forecast.
    pub members: Vec<(Member, f64)>,
}

/// Every forecast that came due, origin by origin, and what it says of those to come.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Replay {
    /// The forecasts.
    pub cases: Vec<Case>,
    scores: Vec<DateScore>,
    misses: Vec<Miss>,
    origins: usize,
}

/// Tail sizes as they were observed: at a date, past a threshold; none where the date has no snapshot.
pub type Observed<'a> = dyn Fn(Timestamp, u64) -> Option<f64> + 'a;

/// Goes through `records`, oldest first, one a period, as time did: each origin's members are weighed and its intervals made by
/// what had come by then, and by nothing else.
///
/// Cost: linear in the cases, and in the scored dates of each origin.
pub fn replay(records: &[OriginRecord], observed: &Observed) -> Replay {
    let mut replay = Replay::default();
    for record in records {
        let mut misses = Vec::new();
        for outlook in &record.outlooks {
            let target = &outlook.target;
            if !matches!(target.growth, Growth::Known | Growth::Expected) {
                continue;
            }
            let weights = replay.pool(record, target.ahead);
            let spread = replay.spread(target.ahead, target.growth);
            let mut came_due = Vec::new();
            for (j, &threshold) in record.thresholds.iter().enumerate() {
                let came = observed(target.date, threshold);
                let (Some(tail), Some(came)) = (pooled_tail(record, outlook, &weights, j), came) else { continue };
                came_due.push((tail, came));
                replay.cases.push(Case {
                    origin: record.as_of,
                    date: target.date,
                    ahead: target.ahead.round() as u32,
                    growth: target.growth,
                    threshold,
                    observed: came,
                    pooled: tail.size,
                    law: law(record, &tail, &spread),
                    members: record.members(outlook, j),
                });
            }
            misses.extend(miss(replay.origins, target, &came_due, &spread));
        }
        replay.misses.extend(misses);
        replay.scores.extend(date_scores(replay.origins, record, observed));
        replay.origins += 1;
    }
    replay
}

impl Replay {
    /// How members are weighed at `record`, the origin after all that were replayed, for dates `ahead` periods away.
    pub fn pool(&self, record: &OriginRecord, ahead: f64) -> Pool {
        pool(record, self.origins, &self.scores, ahead)
    }

    /// The spread `ahead` periods from the origin after all that were replayed, by totals that are known or expected.
    pub fn spread(&self, ahead: f64, growth: Growth) -> Spread {
        spread(&self.misses, self.origins, ahead, growth == Growth::Known)
    }
}

/// The pooled forecast of the tail at index `j`, with its variance by chance and by what the members disagree by.
pub(super) fn pooled_tail(record: &OriginRecord, outlook: &Outlook, weights: &Pool, j: usize) -> Option<PooledTail> {
    let members = record.members(outlook, j);
    let size = pooled_size(weights, &members)?;
    let mix = record.models.iter().position(|&m| m == Model::Mix).and_then(|i| outlook.laws.get(i)?.as_ref());
    let now = record.sizes.get(j)?.1;
    let kept = mix.and_then(|mix| mix.kept.get(j).copied()).unwrap_or(now).min(size);
    // Chance is the mix's, for as many nodes as the pool has coming; where nodes may leave, those that stay are chance too.
    let by_mix = mix.and_then(|mix| Some((*mix.mean.get(j)?, *mix.kept.get(j)?, *mix.variance.get(j)?)));
    let flow = size - kept;
    let chance = match by_mix {
        Some((mean, _, variance)) if !record.lossless && mean > 0.0 => variance * size / mean,
        Some((mean, kept, variance)) if mean > kept => variance * flow / (mean - kept),
        _ => flow,
    };
    let between: f64 = weights
        .shares
        .iter()
        .filter_map(|share| {
            let (_, own) = members.iter().find(|(member, _)| *member == share.member)?;
            Some(share.weight * (own - size).powi(2))
        })
        .sum();
    Some(PooledTail { size, kept, chance, variance: chance + between, of_growth: of_growth(record, outlook, j) })
}

/// Variance that the uncertainty of arrivals and landings adds: for each the square of half of what one standard deviation to
/// either side makes of the tail at index `j`; 0 where they came or are given as certain.
fn of_growth(record: &OriginRecord, outlook: &Outlook, j: usize) -> f64 {
    // Totals that came stand beside expected ones, whose sides are not theirs. Rates that are given bring their own sides.
    if outlook.target.growth == Growth::Known && outlook.target.rates.is_none() {
        return 0.0;
    }
    let mix = record.models.iter().position(|&m| m == Model::Mix);
    let side = |growth| {
        let found = record.outlooks.iter();
        let mut found = found.filter(|o| o.target.growth == growth && o.target.date == outlook.target.date);
        found.next()?.laws.get(mix?)?.as_ref()?.mean.get(j).copied()
    };
    let variance = |rate| match (side(Growth::Low(rate)), side(Growth::High(rate))) {
        (Some(low), Some(high)) => (0.5 * (high - low)).powi(2),
        _ => 0.0,
    };
    variance(Rate::Arrivals) + variance(Rate::Links)
}

/// The law of the pooled forecast.
pub(super) fn law(record: &OriginRecord, tail: &PooledTail, spread: &Spread) -> CountLaw {
    let certain = if record.lossless { tail.kept } else { 0.0 };
    let law = CountLaw::new(certain, tail.size - certain, spread.variance(tail));
    law.with_degrees_of_freedom(spread.degrees_of_freedom)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::evaluate::{LawSizes, PoolShare, Target, Totals, Trend};

    /// A trend that foresees fewer nodes than the mix takes to stay leaves the chance that these nodes' departures are.
    #[test]
    fn nodes_that_may_leave_are_chance_also_where_none_come() {
        let as_of: Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
        let date = "2026-02-01T00:00:00Z".parse().unwrap();
        let totals = |day, nodes| Totals { day, nodes, link_ends: nodes };
        let law = LawSizes { mean: vec![12.0], kept: vec![11.9], variance: vec![1.0] };
        let target = Target { date, ahead: 1.0, growth: Growth::Known, totals: (120.0, 120.0), rates: None };
        let outlook = Outlook { target, laws: vec![Some(law)] };
        let record = OriginRecord {
            as_of,
            thresholds: vec![5],
            totals: (totals(-31.0, 100.0), totals(0.0, 110.0)),
            sizes: vec![(15.0, 13.0)],
            lossless: false,
            models: vec![Model::Mix],
            hindsight: vec![None],
            outlooks: Vec::new(),
        };
        let shares = vec![PoolShare { member: Member::Trend(Trend::PerArrival), score: 1.0, weight: 1.0 }];
        let tail = pooled_tail(&record, &outlook, &Pool { scored: 1, shares }, 0).unwrap();
        assert!((tail.size - 11.0).abs() < 1e-12, "{tail:?}");
        assert!((tail.chance - 11.0 / 12.0).abs() < 1e-12, "{tail:?}");
    }
}

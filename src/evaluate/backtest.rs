//! Rolling origins: what would have been forecast at each, and what came.

use jiff::Timestamp;

use super::member::Member;
use super::pool::{Pool, pool, pooled_size};
use super::record::{Growth, OriginRecord, Outlook};
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

/// Every forecast that came due, origin by origin, and what their misses say of those to come.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Replay {
    /// The forecasts.
    pub cases: Vec<Case>,
    misses: Vec<Miss>,
    origins: usize,
}

/// Tail sizes as they were observed: at a date, past a threshold; none where the date has no snapshot.
pub type Observed<'a> = dyn Fn(Timestamp, u64) -> Option<f64> + 'a;

/// Goes through `records`, oldest first, one a period, as time did: each origin's members are weighed and its intervals made by
/// what had come by then, and by nothing else.
pub fn replay(records: &[OriginRecord], observed: &Observed) -> Replay {
    let mut replay = Replay::default();
    for (origin, record) in records.iter().enumerate() {
        for outlook in &record.outlooks {
            let target = outlook.target;
            if !matches!(target.growth, Growth::Known | Growth::Expected) {
                continue;
            }
            let weights = pool(record, &records[..origin], observed, target.ahead);
            let spread = spread(&replay.misses, origin, target.ahead);
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
                    law: law(record, &tail, &spread, of_growth(record, outlook, j)),
                    members: record.members(outlook, j),
                });
            }
            if target.growth == Growth::Known {
                replay.misses.extend(miss(origin, target.ahead, &came_due, &spread));
            }
        }
        replay.origins = origin + 1;
    }
    replay
}

impl Replay {
    /// The spread `ahead` periods from the newest origin, the one after all that were replayed.
    pub fn spread(&self, ahead: f64) -> Spread {
        spread(&self.misses, self.origins, ahead)
    }

    /// Dates that came due.
    pub fn scored(&self) -> usize {
        self.misses.len()
    }
}

/// The pooled forecast of the tail at index `j`, with its variance by chance and by what the members disagree by.
fn pooled_tail(record: &OriginRecord, outlook: &Outlook, weights: &Pool, j: usize) -> Option<PooledTail> {
    let members = record.members(outlook, j);
    let size = pooled_size(weights, &members)?;
    let mix = record.models.iter().position(|&m| m == Model::Mix).and_then(|i| outlook.laws.get(i)?.as_ref());
    let now = record.sizes.get(j)?.1;
    let kept = mix.and_then(|mix| mix.kept.get(j).copied()).unwrap_or(now).min(size);
    // Chance is the mix's, for as many nodes as the pool has coming.
    let by_mix = mix.and_then(|mix| Some((mix.mean.get(j)? - mix.kept.get(j)?, *mix.variance.get(j)?)));
    let flow = size - kept;
    let chance = match by_mix {
        Some((expected, variance)) if expected > 0.0 => variance * flow / expected,
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
    Some(PooledTail { size, kept, variance: chance + between })
}

/// Variance that the uncertainty of arrivals and landings adds: the square of half of what one standard deviation to either side
/// makes of the tail at index `j`; 0 where they are known.
fn of_growth(record: &OriginRecord, outlook: &Outlook, j: usize) -> f64 {
    if outlook.target.growth == Growth::Known {
        return 0.0;
    }
    let mix = record.models.iter().position(|&m| m == Model::Mix);
    let side = |growth| {
        let found = record.outlooks.iter();
        let mut found = found.filter(|o| o.target.growth == growth && o.target.date == outlook.target.date);
        found.next()?.laws.get(mix?)?.as_ref()?.mean.get(j).copied()
    };
    match (side(Growth::Low), side(Growth::High)) {
        (Some(low), Some(high)) => (0.5 * (high - low)).powi(2),
        _ => 0.0,
    }
}

/// The law of the pooled forecast, with `more` variance than the record makes of it.
fn law(record: &OriginRecord, tail: &PooledTail, spread: &Spread, more: f64) -> CountLaw {
    let certain = if record.lossless { tail.kept } else { 0.0 };
    let law = CountLaw::new(certain, tail.size - certain, spread.variance(tail) + more);
    law.with_degrees_of_freedom(spread.degrees_of_freedom)
}

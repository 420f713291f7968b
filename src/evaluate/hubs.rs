//! The next hubs: the degrees of the largest nodes.

use super::OriginError;
use super::prospect::Prospect;
use super::questions::{HubRank, HubsAtDate};
use crate::forecast::RankLaw;
use crate::growth::{Course, NodeLaw};
use crate::model::{Change, Interval};
use crate::numerics::elementary::normal_quantile;

/// The degree of the node of each rank up to `ranks`, at every date of the forecast, by the fitted forces.
///
/// Formula: [`RankLaw`]; its intervals are widened on the scale of ln(degree) by what is uncertain of the forces and by the model
/// error, as that of the largest degree is.
///
/// # Errors
/// Cancellation; growth that cannot be computed.
pub(super) fn hubs(prospect: &Prospect, ranks: usize) -> Result<Vec<HubsAtDate>, OriginError> {
    if ranks == 0 {
        return Ok(Vec::new());
    }
    let plan = &prospect.request.plan;
    let horizon = plan.days().last().copied().unwrap_or(0.0);
    let course = prospect.course(&Change::none(""), horizon)?;
    let ends = prospect.ends(&Change::none(""), horizon)?;
    let mut dates = Vec::new();
    for (&date, &day) in plan.dates().iter().zip(plan.days()) {
        let law = RankLaw::new(&course, prospect.counts, day, ranks, prospect.cancelled)?;
        let rank = |rank: usize| {
            let now = prospect.counts.degree_of_rank(rank as u64);
            let median = law.quantile(rank, 0.5);
            let start = now.unwrap_or(median as u64);
            let spread = log_spread(&ends, start, day).hypot(prospect.node_error(day) * log_gain(start, median));
            let side = |probability: f64| {
                let own = (law.quantile(rank, probability).ln_1p() - median.ln_1p()).abs();
                let reach = own.hypot(normal_quantile(probability).abs() * spread);
                (median.ln_1p() + reach * (probability - 0.5).signum()).exp_m1().round().max(0.0)
            };
            let least = if prospect.scenario.forces.has_losses() { 0.0 } else { now.map_or(0.0, |now| now as f64) };
            let interval = |&level: &f64| Interval {
                level,
                low: side(0.5 - 0.5 * level).max(least),
                high: side(0.5 + 0.5 * level),
            };
            let intervals = plan.levels().iter().map(interval).collect();
            HubRank { rank, now, expected: law.expected(rank), median, intervals }
        };
        dates.push(HubsAtDate { date, ranks: (1..=ranks).map(rank).collect() });
    }
    Ok(dates)
}

/// Standard deviation of ln of the expected degree of a node of degree `start`, by what is uncertain of the forces.
pub(super) fn log_spread(ends: &[(Course, Course)], start: u64, day: f64) -> f64 {
    let mean = |course: &Course| NodeLaw::between(course, 0.0, day).mean(start).ln_1p();
    ends.iter().map(|(low, high)| (0.5 * (mean(high) - mean(low))).powi(2)).sum::<f64>().sqrt()
}

/// How far a degree has come, on the scale of its logarithm.
pub(super) fn log_gain(start: u64, then: f64) -> f64 {
    (then.ln_1p() - (start as f64).ln_1p()).abs()
}

//! What-ifs beside the forecast as it stands.

use super::OriginError;
use super::costs::costs;
use super::limits::{limits, percent};
use super::prospect::{Prospect, of_growth};
use super::questions::{AmountForecast, ScenarioAnswer, ScenarioAtDate, TailDifference};
use crate::forecast::TailLaw;
use crate::growth::{Course, NetworkLaw, TailParts};
use crate::model::{Change, Interval};
use crate::numerics::elementary::normal_quantile;
use crate::numerics::tolerances::Accuracy;

/// Relative rounding of a tail's expectation.
const ROUNDING: f64 = 1e-9;

/// What `change` would make of the tails, limits and costs.
///
/// Formula of the paired variance: a node that is in the tail under one of the two with a probability larger by d is there under that
/// one alone with probability d, so chance leaves Σ n_k·|d_k|·(1 − |d_k|), and of Poisson newcomers the difference of their means:
/// the least that is left when both plans meet the same nodes and arrivals. To it come, for each direction in which the forces are
/// uncertain, the square of half of what the difference differs by between its ends, (model error × difference)², and under a pool the
/// square of what its difference and that of the fitted law are apart. Two independent worlds would leave the sum of both variances.
///
/// # Errors
/// Cancellation; growth that cannot be computed; a rate out of range.
pub(super) fn compare(prospect: &Prospect, change: &Change) -> Result<ScenarioAnswer, OriginError> {
    let plan = &prospect.request.plan;
    let standing = Change::none("");
    let horizon = plan.days().last().copied().unwrap_or(0.0);
    let alike = prospect.takes_alike(change);
    let (before, ends_before) = prospect.courses(&standing, horizon, alike)?;
    let (after, ends_after) = prospect.courses(change, horizon, alike)?;
    let laws = prospect.tails(plan, &standing)?.into_iter().zip(prospect.tails(plan, change)?);
    let mut dates = Vec::new();
    for ((&date, &day), (laws_before, laws_after)) in plan.dates().iter().zip(plan.days()).zip(laws) {
        let at = |course| {
            let law = NetworkLaw::at(course, prospect.counts, day).map_err(of_growth)?;
            Ok::<_, OriginError>(law.until(prospect.cancelled))
        };
        let central = (at(&before)?, at(&after)?);
        // A direction that only the change has, such as a range of its own arrivals, leaves the forecast as it stands.
        let ends = ends_after.iter().enumerate().map(|(i, after)| {
            let (low, high) = ends_before.get(i).map_or((&before, &before), |ends| (&ends.0, &ends.1));
            Ok(((at(low)?, at(high)?), (at(&after.0)?, at(&after.1)?)))
        });
        let ends = ends.collect::<Result<Vec<_>, OriginError>>()?;
        let mut tail = Vec::new();
        for (law_before, law_after) in laws_before.iter().zip(&laws_after) {
            prospect.check()?;
            let threshold = law_before.threshold;
            let parts = |law: &NetworkLaw| law.parts(threshold, Accuracy::Working).map_err(of_growth);
            let mean = |law: &NetworkLaw| Ok::<_, OriginError>(law.rough_tail(threshold).map_err(of_growth)?.mean);
            let mut beyond = 0.0;
            for ((low_before, high_before), (low_after, high_after)) in &ends {
                let low = mean(low_after)? - mean(low_before)?;
                let high = mean(high_after)? - mean(high_before)?;
                beyond += (0.5 * (high - low)).powi(2);
            }
            let (own_before, own_after) = (parts(&central.0)?, parts(&central.1)?);
            let paired = paired_variance(&own_before, &own_after);
            if prospect.pooled.is_some() {
                // What the pool's other members make of the change beside the fitted law.
                let own = own_after.sum(threshold).mean - own_before.sum(threshold).mean;
                beyond += (law_after.mean() - law_before.mean() - own).powi(2);
            }
            let error = prospect.model_error(day);
            tail.push(difference(law_before, law_after, paired, beyond, error, plan.levels()));
        }
        dates.push(ScenarioAtDate { date, nodes: after.nodes(day), links: after.link_ends(day), tail });
    }
    let verdict = in_words(change, &dates, (&before, &after), horizon);
    let bands = prospect.request.questions.bands.as_ref().map(|bands| costs(prospect, bands, change)).transpose()?;
    Ok(ScenarioAnswer { name: change.name.clone(), dates, limits: limits(prospect, change, false)?, bands, verdict })
}

fn difference(
    before: &TailLaw,
    after: &TailLaw,
    paired: f64,
    beyond: f64,
    error: f64,
    levels: &[f64],
) -> TailDifference {
    let apart = after.mean() - before.mean();
    // Before a change takes hold the two differ by rounding.
    let same = apart.abs() <= ROUNDING * before.mean();
    let expected = if same { 0.0 } else { apart };
    let variance = if same { 0.0 } else { paired + beyond + (error * expected).powi(2) };
    let interval = |&level: &f64| {
        let reach = normal_quantile(0.5 + 0.5 * level) * variance.sqrt();
        Interval { level, low: expected - reach, high: expected + reach }
    };
    TailDifference {
        threshold: before.threshold,
        scenario: after.mean(),
        standing: before.mean(),
        difference: AmountForecast { expected, intervals: levels.iter().map(interval).collect() },
        paired_variance: variance,
        independent_variance: before.law.rest().variance + after.law.rest().variance,
    }
}

/// What chance leaves of the difference of two tails of the same nodes. Both lists run down from the largest degree; what one leaves
/// out is as good as 0 there.
fn paired_variance(before: &TailParts, after: &TailParts) -> f64 {
    let longest = before.present.len().max(after.present.len());
    let of_present = (0..longest).map(|i| {
        let (a, b) = (before.present.get(i), after.present.get(i));
        let nodes = a.or(b).map_or(0.0, |class| class.nodes);
        let apart = (a.map_or(0.0, |class| class.probability) - b.map_or(0.0, |class| class.probability)).abs();
        nodes * apart * (1.0 - apart)
    });
    of_present.sum::<f64>() + (after.newcomers - before.newcomers).abs()
}

fn in_words(change: &Change, dates: &[ScenarioAtDate], (before, after): (&Course, &Course), horizon: f64) -> String {
    let Some(last) = dates.last() else { return String::new() };
    let sure = |row: &&TailDifference| {
        row.difference.intervals.last().is_some_and(|interval| interval.low > 0.0 || interval.high < 0.0)
    };
    let relative = |row: &TailDifference| (row.difference.expected / row.standing.max(0.5)).abs();
    let largest = last.tail.iter().filter(sure).max_by(|a, b| relative(a).total_cmp(&relative(b)));
    let date = last.date.strftime("%Y-%m-%d");
    let totals = after.nodes(horizon) / before.nodes(horizon) - 1.0;
    let nodes = match totals {
        more if more >= 5e-4 => format!(", {} more nodes in all", percent(more)),
        fewer if fewer <= -5e-4 => format!(", {} fewer nodes in all", percent(-fewer)),
        _ => String::new(),
    };
    match largest {
        None => format!("{}: by {date} no tail differs beyond its interval{nodes}", change.name),
        Some(row) => {
            let more = if row.difference.expected > 0.0 { "more" } else { "fewer" };
            format!(
                "{}: by {date} {:.1} {more} nodes with {} links or more ({:.1} in place of {:.1}){nodes}",
                change.name,
                row.difference.expected.abs(),
                row.threshold,
                row.scenario,
                row.standing
            )
        }
    }
}

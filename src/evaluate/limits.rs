//! Limits on tail sizes: how likely they are passed, when, and what growth keeps within them.

use jiff::Timestamp;

use super::OriginError;
use super::crossing::{TailCourse, View};
use super::prospect::Prospect;
use super::questions::{DateAt, LimitAnswer, LimitAtDate};
use super::sustainable::{Rate, sustainable, untold};
use crate::forecast::TailLaw;
use crate::model::{Change, Limit, MAX_DEGREE};

/// Even steps in which the way to a limit's date is looked at, where nodes in the tail stay in it.
const STEPS: u32 = 24;
/// The same where the tail can shrink: every step is one more dimension of the path's law, and between steps it is a bridge.
pub(super) const PATH_STEPS: u32 = 32;
/// Most steps beyond the limit's date.
const MOST_BEYOND: f64 = 24.0;
/// Days that dates may be rounded by.
const DATE_ROUNDING: f64 = 1e-6;
/// Probabilities whose dates are told.
const TOLD: [f64; 3] = [0.05, 0.5, 0.95];

/// Answers every limit under `change`; with the rates that keep it when `backwards`.
///
/// # Errors
/// Cancellation; growth that cannot be computed.
pub(super) fn limits(prospect: &Prospect, change: &Change, backwards: bool) -> Result<Vec<LimitAnswer>, OriginError> {
    let asked = prospect.request.questions.limits.iter();
    asked.map(|limit| answer(prospect, limit, change, backwards)).collect()
}

fn answer(prospect: &Prospect, limit: &Limit, change: &Change, backwards: bool) -> Result<LimitAnswer, OriginError> {
    let by = prospect.day(limit.by());
    let plan = &prospect.request.plan;
    let farthest = plan.days().iter().copied().fold(by, f64::max);
    let course = TailCourse::new(prospect, limit.threshold(), &way(prospect, change, by, farthest)?, change)?;
    let most = limit.max_nodes() as f64;
    let crossed = course.crossed(most, View::Whole)?;
    let own_date = (!plan.dates().contains(&limit.by())).then_some(limit.by());
    let mut asked: Vec<Timestamp> = plan.dates().iter().copied().chain(own_date).collect();
    asked.sort_unstable();
    let days: Vec<f64> = asked.iter().map(|&date| prospect.day(date)).collect();
    // The limit's own date in a plan of its own: a forecast may have as many dates as one takes.
    let mut laws = prospect.tails(&prospect.plan(&[limit.threshold()], plan.days())?, change)?;
    if let Some(own) = own_date {
        let at = asked.iter().position(|&date| date == own).unwrap_or(laws.len()).min(laws.len());
        let mut single = prospect.tails(&prospect.plan(&[limit.threshold()], &[by])?, change)?;
        laws.splice(at..at, single.drain(..));
    }
    let mut highest: f64 = 0.0;
    let at = |((date, day), laws): ((Timestamp, f64), Vec<TailLaw>)| {
        let exceeding = laws.first().map_or(0.0, |law| law.law.above(most));
        highest = highest.max(exceeding).max(course.probability_at(&crossed, day));
        LimitAtDate { date, exceeding, crossed: highest }
    };
    let dates: Vec<LimitAtDate> = asked.iter().copied().zip(days.iter().copied()).zip(laws).map(at).collect();
    let Some(at_by) = dates.iter().copied().find(|at| at.date == limit.by()) else {
        return Err(OriginError::Unplanned(format!("{} is no date of the limit's own", limit.by())));
    };
    let date_at = |probability: f64| {
        let date = course.day_at(&crossed, probability).and_then(|day| prospect.date(day));
        DateAt { probability, date }
    };
    let now = prospect.counts.tail_size(limit.threshold());
    let passed = now > limit.max_nodes();
    let as_of = prospect.request.evidence.latest().as_of;
    let mut crossing: Vec<DateAt> = TOLD.map(date_at).to_vec();
    let mut risk_reached = date_at(limit.risk());
    if passed {
        crossing.iter_mut().chain([&mut risk_reached]).for_each(|at| at.date = Some(as_of));
    }
    let days_left = risk_reached.date.map(|date| prospect.day(date).max(0.0));
    let (arrivals, links) = match (backwards, passed) {
        (true, false) => (sustainable(prospect, limit, Rate::Arrivals)?, sustainable(prospect, limit, Rate::Links)?),
        (true, true) => {
            let detail = "the limit is passed already, so no rate keeps within it";
            (untold(detail), untold(detail))
        }
        (false, _) => {
            let detail = "rates to sustain are worked out for the forecast as it stands";
            (untold(detail), untold(detail))
        }
    };
    let nearest = nearest_limit(&course, limit, by)?;
    let verdict = in_words(limit, now, &at_by, &risk_reached, nearest, course.is_monotone());
    Ok(LimitAnswer {
        limit: limit.clone(),
        now,
        headroom: limit.max_nodes() as f64 - now as f64,
        monotone: course.is_monotone(),
        dates,
        at_by,
        crossing,
        risk_reached,
        days_left,
        arrivals,
        links_per_arrival: links,
        verdict,
    })
}

/// Days at which the way is looked at: even steps up to the limit's date, and beyond it to the farthest.
fn way(prospect: &Prospect, change: &Change, by: f64, farthest: f64) -> Result<Vec<f64>, OriginError> {
    let steps = if prospect.forces(change)?.has_losses() { PATH_STEPS } else { STEPS };
    let mut days: Vec<f64> = (1..=steps).map(|i| by * f64::from(i) / f64::from(steps)).collect();
    if farthest > by + DATE_ROUNDING {
        let beyond = ((farthest - by) / by * f64::from(steps)).ceil().clamp(1.0, MOST_BEYOND);
        days.extend((1..=beyond as u32).map(|i| by + (farthest - by) * f64::from(i) / beyond));
    }
    Ok(days)
}

/// The smallest number of nodes that would keep the risk up to the limit's date: what would have to be provided for.
fn nearest_limit(course: &TailCourse, limit: &Limit, by: f64) -> Result<Option<u64>, OriginError> {
    let Some(last) = course.days().iter().rposition(|&day| day <= by + DATE_ROUNDING) else { return Ok(None) };
    let Some(law) = course.laws().get(last).map(|law| law.law) else { return Ok(None) };
    let risk = limit.risk().max(LEAST_RISK);
    let too_few = |most: f64| Ok::<_, OriginError>(course.crossed_by(last, most, View::Whole)? > risk);
    let (mut below, mut reach) = (-1.0, (law.quantile(1.0 - risk) + 1.0).max(1.0));
    while reach < MAX_DEGREE as f64 && too_few(reach)? {
        (below, reach) = (reach, 2.0 * reach);
    }
    while reach - below > 1.0 {
        let middle = (0.5 * (below + reach)).floor();
        if too_few(middle)? { below = middle } else { reach = middle }
    }
    Ok(Some(reach as u64))
}

/// Stands for a risk of 0 where something has to be said: nothing random is ruled out.
pub(super) const LEAST_RISK: f64 = 0.001;

fn in_words(
    limit: &Limit,
    now: u64,
    at_by: &LimitAtDate,
    risk_reached: &DateAt,
    nearest: Option<u64>,
    monotone: bool,
) -> String {
    let name = limit.name().map_or(String::new(), |name| format!("{name}: "));
    let (most, threshold) = (limit.max_nodes(), limit.threshold());
    let day = |date: Timestamp| date.strftime("%Y-%m-%d").to_string();
    let by = day(limit.by());
    let provide = nearest.map_or(String::new(), |nearest| {
        let risk = if limit.risk() < LEAST_RISK { LEAST_RISK } else { limit.risk() };
        format!("; {nearest} would keep a risk of {} until {by}", percent(risk))
    });
    if now > most {
        return format!(
            "{name}the limit of {most} nodes with {threshold} links or more is passed already: there are {now}{provide}"
        );
    }
    let room = format!("{now} of {most} nodes with {threshold} links or more today");
    let passing = if monotone { "being above the limit" } else { "having crossed the limit at some time" };
    let chance = format!("the probability of {passing} by {by} is {}", percent(at_by.crossed));
    let left = match (limit.risk(), risk_reached.date) {
        (0.0, _) => format!("a risk of 0 is kept by no limit where anything may come{provide}"),
        (risk, Some(date)) if date <= limit.by() => {
            format!("the risk of {} is reached on {}{provide}", percent(risk), day(date))
        }
        (risk, Some(date)) => format!("the risk of {} is reached only on {}", percent(risk), day(date)),
        (risk, None) => format!("the risk of {} is not reached by the last date looked at", percent(risk)),
    };
    format!("{name}{room}; {chance}; {left}")
}

/// A probability in words.
pub(super) fn percent(probability: f64) -> String {
    match 100.0 * probability {
        p if p >= 99.95 => "over 99.9 %".into(),
        p if p >= 10.0 => format!("{p:.0} %"),
        p if p >= 0.1 => format!("{p:.1} %"),
        _ => "under 0.1 %".into(),
    }
}

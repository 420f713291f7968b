//! Backwards: the largest rate that keeps a risk.

use super::OriginError;
use super::arrivals::figures;
use super::crossing::{Correlations, TailCourse, View};
use super::limits::{LEAST_RISK, PATH_STEPS, percent};
use super::prospect::Prospect;
use super::questions::Sustainable;
use crate::forecast::ForecastError;
use crate::model::{ArrivalPlan, Change, Interval, Limit, Shift};
use crate::numerics::elementary::normal_quantile;
use crate::numerics::roots::increasing_root;

/// Level of the interval of a rate.
const LEVEL: f64 = 0.9;
/// A rate is found to this, relative: the forecast by it has the risk to 10⁻⁶.
const RATE_TOLERANCE: f64 = 1e-11;
/// A rate whose risk is off by more than this was not found.
const RISK_TOLERANCE: f64 = 1e-4;
/// Ends of its interval are found to this.
const END_TOLERANCE: f64 = 1e-3;
/// First step of a search, in the logarithm of the rate.
const FIRST_STEP: f64 = 0.25;
/// Rounds until a rate and the correlations of the way go together; each brings about a digit and a half.
const MOST_ROUNDS: usize = 10;
/// They do once the rate moves by less than this, relative.
const SETTLED: f64 = 3e-8;
/// Factors on the rate that are tried: up to this, and down to its inverse squared.
const MOST_FACTOR: f64 = 64.0;

/// A rate that a planner may hold down.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Rate {
    Arrivals,
    Links,
}

/// No rate, and why.
pub(super) fn untold(detail: impl Into<String>) -> Sustainable {
    Sustainable { rate: None, factor: None, interval: None, detail: detail.into() }
}

/// The largest factor on a rate that keeps the limit's risk, the rate being held exactly; with it the rate itself.
///
/// # Errors
/// Cancellation.
pub(super) fn sustainable(prospect: &Prospect, limit: &Limit, rate: Rate) -> Result<Sustainable, OriginError> {
    let search = Search::new(prospect, limit, rate);
    let (name, unit) = match rate {
        Rate::Arrivals => ("arrivals", "a day"),
        Rate::Links => ("links per arrival", "links per arrival"),
    };
    let standing = search.rate(1.0);
    if standing == 0.0 {
        return Ok(untold(format!("no {name} are expected, so there is nothing to hold down")));
    }
    let (risk, asked) = (limit.risk().max(LEAST_RISK), limit.risk());
    let standing_path = search.correlations(1.0)?;
    let without = search.risk(0.0, View::Whole, &standing_path)?;
    if without > risk {
        return Ok(untold(format!(
            "no {name} are few enough: even with none the probability of crossing by the date is {}, and that is the nearest \
             to the risk of {}",
            percent(without),
            percent(asked)
        )));
    }
    let Some((factor, path)) = search.settled(risk, standing_path.clone())? else {
        let most = search.risk(MOST_FACTOR, View::Whole, &standing_path)?;
        return Ok(untold(format!(
            "{name} do not bring the limit near: at {MOST_FACTOR} times the rate the probability of crossing by the date is {}",
            percent(most)
        )));
    };
    let kept = search.risk(factor, View::Whole, &path)?;
    if kept > risk + RISK_TOLERANCE {
        return Ok(untold(format!(
            "no {name} at all keep the risk of {}, but next to none do not: {} {unit} already bring {}",
            percent(asked),
            figures(search.rate(factor)),
            percent(kept)
        )));
    }
    if asked < LEAST_RISK {
        return Ok(untold(format!(
            "no {name} above 0 keep a risk of {asked}; the nearest: {} {unit} keep a risk of {}",
            figures(search.rate(factor)),
            percent(risk)
        )));
    }
    // The forces at the unlucky end cross soon, and allow less.
    let deviations = normal_quantile(0.5 + 0.5 * LEVEL);
    let end =
        |deviations: f64| search.largest(risk, View::Known(deviations), (factor, FIRST_STEP), END_TOLERANCE, &path);
    let ends = (end(deviations)?, end(-deviations)?);
    let interval = match ends {
        (Some(low), Some(high)) => {
            let (low, high) = (search.rate(low.min(factor)), search.rate(high.max(factor)));
            Some(Interval { level: LEVEL, low, high })
        }
        _ => None,
    };
    let (found, compare) = (search.rate(factor), if factor < 1.0 { "less" } else { "more" });
    let change = 100.0 * (factor - 1.0).abs();
    let detail = format!(
        "at most {} {unit} keep the risk of {} ({change:.1} % {compare} than the {} of the forecast), held exactly",
        figures(found),
        percent(risk),
        figures(standing)
    );
    Ok(Sustainable { rate: Some(found), factor: Some(factor), interval, detail })
}

struct Search<'a> {
    prospect: &'a Prospect<'a>,
    limit: &'a Limit,
    rate: Rate,
    by: f64,
    days: Vec<f64>,
    arrivals: ArrivalPlan,
    links: f64,
}

impl<'a> Search<'a> {
    fn new(prospect: &'a Prospect<'a>, limit: &'a Limit, rate: Rate) -> Self {
        let forces = &prospect.scenario.forces;
        let by = prospect.day(limit.by());
        let steps = if forces.has_losses() { PATH_STEPS } else { 1 };
        let days = (1..=steps).map(|i| by * f64::from(i) / f64::from(steps)).collect();
        Self {
            prospect,
            limit,
            rate,
            by,
            days,
            arrivals: forces.arrivals.clone().certain(),
            links: forces.links_per_arrival(),
        }
    }

    /// The rate that a factor stands for.
    fn rate(&self, factor: f64) -> f64 {
        match self.rate {
            Rate::Arrivals => factor * self.arrivals.arrivals_between(0.0, self.by) / self.by,
            Rate::Links => factor * self.links,
        }
    }

    /// Probability of a crossing by the limit's date with the rate held at a factor.
    fn risk(&self, factor: f64, view: View, path: &Correlations) -> Result<f64, OriginError> {
        let (change, threshold) = (self.change(factor), self.limit.threshold());
        let course = TailCourse::correlated(self.prospect, threshold, &self.days, &change, path.clone())?;
        course.crossed_by(self.days.len() - 1, self.limit.max_nodes() as f64, view)
    }

    /// Correlations by chance of the tail on its way, with the rate held at a factor.
    fn correlations(&self, factor: f64) -> Result<Correlations, OriginError> {
        Correlations::new(self.prospect, self.limit.threshold(), &self.days, &self.change(factor))
    }

    /// The largest factor that keeps `risk`, and the correlations there. These hardly depend on the factor and cost much: the factor
    /// is found for given ones, these are made anew there, and so on until it stands still.
    fn settled(&self, risk: f64, mut path: Correlations) -> Result<Option<(f64, Correlations)>, OriginError> {
        let (mut factor, mut step): (f64, f64) = (1.0, FIRST_STEP);
        for _ in 0..MOST_ROUNDS {
            let Some(found) = self.largest(risk, View::Whole, (factor, step), RATE_TOLERANCE, &path)? else {
                return Ok(None);
            };
            let moved = (found / factor).ln().abs();
            factor = found;
            if path.is_none() || moved < SETTLED {
                break;
            }
            step = 0.1 * moved;
            path = self.correlations(factor)?;
        }
        Ok(Some((factor, path)))
    }

    fn change(&self, factor: f64) -> Change {
        let mut change = Change::none("");
        match self.rate {
            Rate::Arrivals => change.arrivals = Some(Shift::To(self.arrivals.scaled(factor))),
            Rate::Links => change.links_per_arrival = Some(Shift::To(self.links * factor)),
        }
        change
    }

    /// The largest factor up to [`MOST_FACTOR`] that keeps `risk`, sought from `near` on, to `tolerance` in its logarithm; none where
    /// all do.
    fn largest(
        &self,
        risk: f64,
        view: View,
        (near, first_step): (f64, f64),
        tolerance: f64,
        path: &Correlations,
    ) -> Result<Option<f64>, OriginError> {
        let mut failure = None;
        let mut excess = |log: f64| match self.risk(log.exp(), view, path) {
            Ok(found) => found - risk,
            // Growth beyond what can be computed crosses any limit.
            Err(OriginError::Forecast(ForecastError::Growth(_)) | OriginError::NoPeriod | OriginError::Rate(_)) => 1.0,
            Err(error) => {
                failure.get_or_insert(error);
                0.0
            }
        };
        let (farthest, nearest) = (MOST_FACTOR.ln(), -2.0 * MOST_FACTOR.ln());
        let (mut low, mut high) = (near.ln(), near.ln());
        let mut step = first_step;
        if excess(low) > 0.0 {
            while low > nearest {
                high = low;
                low -= step;
                step *= 2.0;
                if excess(low) <= 0.0 {
                    break;
                }
            }
        } else {
            loop {
                low = high;
                high = (high + step).min(farthest);
                step *= 2.0;
                if excess(high) > 0.0 {
                    break;
                }
                if high >= farthest {
                    return failure.map_or(Ok(None), Err);
                }
            }
        }
        let root = increasing_root(low, high, tolerance, excess);
        failure.map_or(Ok(Some(root.exp())), Err)
    }
}

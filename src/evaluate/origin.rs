//! One origin: fit the evidence up to a date, then forecast from it.

use super::arrivals::{forecast_arrivals, forecast_links_per_arrival};
use super::member::Member;
use super::pool::LEAST_WEIGHT;
use super::pooled::{PoolUse, past_records};
use super::prospect::Prospect;
use super::questions::{Answers, answers};
use super::record::OriginRecord;
use crate::fit::{Candidate, Fit, FitError, FitRequest, Fixed, Force, Forces, ModelChoice, Rung, fit};
use crate::forecast::{DateForecast, Excursion, ForecastError, Scenario, forecast, forecast_totals};
use crate::model::{
    ArrivalPlan, AttachmentMix, Evidence, ForecastPlan, GrowthParameters, ParameterFault, Questions, Warning,
    days_between,
};
use crate::numerics::orthant::OrthantError;

/// Relative standard deviation of the flow past a threshold that parameters do not account for, while a network has no
/// record of its own. A stated default: one-period forecasts of the two real networks in `examples/data` missed their
/// flows by about this much.
pub const DEFAULT_MODEL_ERROR: f64 = 0.15;

/// Growth of arrivals a year beyond which a percentage may have been meant.
const FAST_GROWTH: f64 = 3.0;

/// What every reader of any forecast must keep in mind.
pub const CAUTIONS: [&str; 5] = [
    "A forecast assumes that growth goes on as the fitted mix and the given rates say; a launch, a policy change or a ranking \
     change breaks it.",
    "Intervals cover chance, the uncertainty of the estimates and a stated allowance for model error; rates that are given \
     without a range are taken as exact, and events without precedent in the data are not covered.",
    "Unless departures or link losses are given or read from transitions, nodes stay and links last; where they do not, the \
     largest hubs come out too many and too certain.",
    "Far thresholds and far dates rest on the fewest nodes: plan with the interval, not with its middle.",
    "Where a capacity failure could harm people, your own engineering practice and its safety margins come before this \
     forecast.",
];

/// Everything one forecast needs.
#[derive(Debug, Clone, PartialEq)]
pub struct OriginRequest {
    /// What is known of the network.
    pub evidence: Evidence,
    /// What is asked of the fit; the rates given there hold for the forecast too.
    pub fit: FitRequest,
    /// Arrivals from the last snapshot on; `None`: estimated from the snapshots.
    pub arrivals: Option<ArrivalPlan>,
    /// Thresholds, dates and levels.
    pub plan: ForecastPlan,
    /// What is asked besides the tails.
    pub questions: Questions,
}

/// A fit and the forecast from it.
#[derive(Debug, Clone, PartialEq)]
pub struct OriginAnswer {
    /// The fit.
    pub fit: Fit,
    /// The forecast, one entry a date.
    pub forecast: Vec<DateForecast>,
    /// How members were weighed for the tails, nearest dates first; empty when a single candidate was asked for or is all there is.
    pub pools: Vec<PoolUse>,
    /// Answers to the questions.
    pub answers: Answers,
    /// Warnings of the fit and of the forecast.
    pub warnings: Vec<Warning>,
    /// What every reader of any forecast must keep in mind.
    pub cautions: Vec<&'static str>,
}

/// Why there is no answer.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum OriginError {
    /// The fit failed.
    #[error(transparent)]
    Fit(#[from] FitError),
    /// The forecast failed.
    #[error(transparent)]
    Forecast(#[from] ForecastError),
    /// No arrival rate is given, and one snapshot cannot show one.
    #[error(
        "no arrivals are given, and a single snapshot cannot show them; give arrivals.per_day or a second snapshot"
    )]
    ArrivalsRequired,
    /// A record of forecasts needs a period before its origin.
    #[error("an origin needs a snapshot before it")]
    NoPeriod,
    /// A question asks for dates that no forecast reaches.
    #[error("{0}")]
    Unplanned(String),
    /// A first passage cannot be computed.
    #[error(transparent)]
    Passage(#[from] OrthantError),
    /// A rate is out of range.
    #[error("{0}")]
    Rate(ParameterFault),
}

/// Fits the evidence and forecasts from its newest snapshot; `cancelled` is asked between thresholds.
///
/// # Errors
/// When the evidence does not tell the mix, or nothing can be forecast from it.
pub fn answer(request: &OriginRequest, cancelled: &dyn Fn() -> bool) -> Result<OriginAnswer, OriginError> {
    let past = past_records_of(request, cancelled)?;
    answer_by(request, &past, cancelled)
}

/// The records that weigh a forecast's members; none where it is no pooled one.
///
/// # Errors
/// Cancellation.
pub fn past_records_of(
    request: &OriginRequest,
    cancelled: &dyn Fn() -> bool,
) -> Result<Vec<OriginRecord>, OriginError> {
    if is_pooled(request) { past_records(request, cancelled) } else { Ok(Vec::new()) }
}

/// Whether a request asks for the pooled forecast: nothing is fixed, no candidate or evidence is asked for, and there is a period.
pub fn is_pooled(request: &OriginRequest) -> bool {
    asks_for_any(request) && request.evidence.snapshots().len() > 1
}

fn asks_for_any(request: &OriginRequest) -> bool {
    let asks = &request.fit;
    asks.choice == ModelChoice::Auto && asks.rung.is_none() && asks.fixed == Fixed::default()
}

/// The same as [`answer`] with the records of earlier origins at hand, those of [`super::scored_origins`] by
/// [`super::RecordPlan::for_forecast`].
///
/// # Errors
/// Those of [`answer`].
pub fn answer_by(
    request: &OriginRequest,
    past: &[OriginRecord],
    cancelled: &dyn Fn() -> bool,
) -> Result<OriginAnswer, OriginError> {
    let fit = fit_origin(request, cancelled)?;
    forecast_by(request, fit, past, cancelled)
}

/// The first half of [`answer_by`]: the fit.
///
/// # Errors
/// Those of [`answer`].
pub fn fit_origin(request: &OriginRequest, cancelled: &dyn Fn() -> bool) -> Result<Fit, OriginError> {
    if cancelled() {
        return Err(ForecastError::Cancelled.into());
    }
    let estimable = request.evidence.snapshots().len() > 1;
    if request.arrivals.is_none() && !estimable {
        return Err(OriginError::ArrivalsRequired);
    }
    Ok(fit(&request.evidence, &request.fit, cancelled)?)
}

/// The second half of [`answer_by`]: the forecast by a fit.
///
/// # Errors
/// Those of [`answer`].
pub fn forecast_by(
    request: &OriginRequest,
    fit: Fit,
    past: &[OriginRecord],
    cancelled: &dyn Fn() -> bool,
) -> Result<OriginAnswer, OriginError> {
    let (scenario, expected) = scenario(request, &fit)?;
    let counts = &request.evidence.latest().counts;
    let mut warnings = fit.warnings.clone();
    let days = asked_days(request);
    let prospect = Prospect::new(request, scenario, past, &days, cancelled)?;
    let (forecast, pools) = match &prospect.pooled {
        Some(pooled) => {
            let totals = forecast_totals(counts, &prospect.scenario, &request.plan, cancelled)?;
            let tails = pooled.tails(&request.plan, &pooled.given())?;
            let levels = request.plan.levels();
            let forecast = totals
                .into_iter()
                .zip(&tails)
                .map(|(totals, tails)| totals.with_tail(tails.iter().map(|law| law.forecast(levels)).collect()));
            let uses = pooled.uses_at(request.plan.days());
            warnings.extend(uses.first().and_then(of_record));
            (forecast.collect(), uses)
        }
        None => {
            warnings.push(assumed(prospect.scenario.model_error, &alternatives(request, &fit)));
            (forecast(counts, &prospect.scenario, &request.plan, cancelled)?, Vec::new())
        }
    };
    let answers = answers(&prospect)?;
    warnings.extend(expected);
    let fastest =
        request.arrivals.iter().flat_map(|plan| plan.segments()).map(|s| s.growth_per_year).fold(0.0, f64::max);
    if fastest > FAST_GROWTH {
        let detail = format!(
            "growth_per_year {fastest} multiplies arrivals by {} each year; 20 % a year is written 0.2",
            1.0 + fastest
        );
        warnings.push(Warning::new("arrivals_grow_fast", detail));
    }
    Ok(OriginAnswer { fit, forecast, pools, answers, warnings, cautions: CAUTIONS.to_vec() })
}

/// Days ahead that anything is asked of: those of the forecast, and on the way to limits.
fn asked_days(request: &OriginRequest) -> Vec<f64> {
    /// Enough to meet every whole number of periods that pools tell apart.
    const ON_THE_WAY: u32 = 64;
    let mut days = request.plan.days().to_vec();
    if !request.questions.limits.is_empty() {
        let as_of = request.evidence.latest().as_of;
        let limits = request.questions.limits.iter().map(|limit| days_between(as_of, limit.by()));
        let farthest = limits.chain(days.iter().copied()).fold(0.0, f64::max);
        days.extend((1..=ON_THE_WAY).map(|i| farthest * f64::from(i) / f64::from(ON_THE_WAY)));
    }
    days
}

/// What a single candidate's intervals allow for.
fn assumed(model_error: f64, others: &[Candidate]) -> Warning {
    let reason = if model_error > DEFAULT_MODEL_ERROR {
        "as much as the fit itself misses the observed flows by"
    } else {
        "a stated default"
    };
    let share = |c: &Candidate| format!("{} ({:.0} %)", c.model.name(), 100.0 * c.weight);
    let by = match others {
        [] => "by one candidate".to_owned(),
        others => {
            let others: Vec<String> = others.iter().map(share).collect();
            format!("by the fitted candidate, pooled by AIC weights with {}", others.join(" and "))
        }
    };
    let detail = format!(
        "the forecast is {by}, without a record of past forecasts, so intervals allow {:.0} % of each expected flow for model \
         error, {reason}",
        100.0 * model_error
    );
    Warning::new("model_error_assumed", detail)
}

/// What the reader of a pooled forecast must know before acting: that there is no record yet, or that no law of attachment leads.
fn of_record(nearest: &PoolUse) -> Option<Warning> {
    let code = match nearest.pool.shares.first()?.member {
        _ if nearest.pool.scored == 0 => "model_error_assumed",
        Member::Trend(_) => "trend_leads",
        _ => return None,
    };
    Some(Warning::new(code, nearest.in_words()))
}

/// The forces that the fit and the request imply, the directions in which they are uncertain, and where the arrivals come from when
/// they are not given.
fn scenario(request: &OriginRequest, fit: &Fit) -> Result<(Scenario, Option<Warning>), OriginError> {
    let horizon = request.plan.days().last().copied().unwrap_or(0.0);
    let forecast = match &request.arrivals {
        Some(_) => None,
        None => forecast_arrivals(&request.evidence, fit.forces.departures.value(), horizon),
    };
    let arrivals = request.arrivals.clone().or(forecast.as_ref().map(|forecast| forecast.central.clone()));
    let arrivals = arrivals.ok_or(OriginError::ArrivalsRequired)?;
    let mix = |share: f64| AttachmentMix::new(share).unwrap_or(AttachmentMix::UNIFORM);
    let links = fit.links_per_arrival.value;
    let forces = GrowthParameters::new(
        request.evidence.kind(),
        mix(fit.preferential_share.value),
        arrivals.clone(),
        fit.entry.clone(),
        links,
    )
    .and_then(|forces| forces.with_links_per_node_day(request.fit.links_per_node_day))
    .map_err(OriginError::Rate)?;
    let forces = under(&fit.forces, &forces, |force| force.value())?;
    let outlook = match request.fit.links_per_arrival {
        Some(_) => None,
        None => forecast_links_per_arrival(&request.evidence, &forces, horizon),
    };
    let (links, deviation) =
        outlook.map_or((links, fit.rate_excursion.links_per_arrival), |l| (l.rate, l.log_deviation));
    let forces = forces.with_links_per_arrival(links).map_err(OriginError::Rate)?;
    let mut excursions = Vec::new();
    let (low, high) = fit.share_excursion;
    if high > low {
        excursions.push(Excursion { low: forces.clone().with_mix(mix(low)), high: forces.clone().with_mix(mix(high)) });
    }
    for moved in DIRECTIONS {
        let (low, high) = moved(&fit.forces).excursion;
        if high > low {
            let at = |side: fn(&Force) -> f64| {
                under(&fit.forces, &forces, |force| {
                    if std::ptr::eq(force, moved(&fit.forces)) { side(force) } else { force.value() }
                })
            };
            excursions.push(Excursion { low: at(|f| f.excursion.0)?, high: at(|f| f.excursion.1)? });
        }
    }
    let with = |links| forces.clone().with_links_per_arrival(links).map_err(OriginError::Rate);
    if deviation > 0.0 {
        let factor = deviation.exp();
        excursions.push(Excursion { low: with(links / factor)?, high: with(links * factor)? });
    }
    let sides = match forecast.as_ref() {
        Some(forecast) => Some((forecast.low.clone(), forecast.high.clone())),
        None => arrivals.sides(),
    };
    if let Some((low, high)) = sides {
        excursions.push(Excursion { low: forces.clone().with_arrivals(low), high: forces.clone().with_arrivals(high) });
    }
    // A fit that misses the very flows it was made from will miss the next ones by no less.
    let flow_error = fit.goodness.and_then(|g| g.flow_error).unwrap_or(0.0);
    let expected = forecast.map(|forecast| Warning::new("arrivals_forecast", forecast.detail));
    let alternatives = alternatives(request, fit).into_iter();
    let alternatives = alternatives.map(|c| (forces.clone().with_mix(mix(c.preferential_share)), c.weight)).collect();
    Ok((Scenario { forces, excursions, alternatives, model_error: flow_error.max(DEFAULT_MODEL_ERROR) }, expected))
}

/// Candidates of one snapshot besides the fitted one, which no record can weigh: those with an AIC weight that counts.
fn alternatives(request: &OriginRequest, fit: &Fit) -> Vec<Candidate> {
    if !asks_for_any(request) || fit.rung != Rung::OneSnapshot {
        return Vec::new();
    }
    fit.candidates.iter().copied().filter(|c| c.model != fit.model && c.weight >= LEAST_WEIGHT).collect()
}

/// The forces besides the mix in which a fit may be uncertain.
const DIRECTIONS: [fn(&Forces) -> &Force; 5] = [
    |forces| &forces.departures,
    |forces| &forces.link_losses,
    |forces| &forces.kernel_exponent,
    |forces| &forces.dormant_share,
    |forces| &forces.growth_variance,
];

/// `base` with the fitted forces at the values that `at` picks.
fn under(
    fitted: &Forces,
    base: &GrowthParameters,
    at: impl Fn(&Force) -> f64,
) -> Result<GrowthParameters, OriginError> {
    base.clone()
        .with_losses(at(&fitted.departures), at(&fitted.link_losses))
        .and_then(|forces| forces.with_kernel_exponent(at(&fitted.kernel_exponent)))
        .and_then(|forces| forces.with_dormant_share(at(&fitted.dormant_share)))
        .and_then(|forces| forces.with_growth_variance(at(&fitted.growth_variance)))
        .map_err(OriginError::Rate)
}

//! One origin: fit the evidence up to a date, then forecast from it.

use crate::fit::{Fit, FitError, FitRequest, Force, Forces, fit};
use crate::forecast::{DateForecast, Excursion, ForecastError, Scenario, forecast};
use crate::model::{ArrivalPlan, AttachmentMix, Evidence, ForecastPlan, GrowthParameters, ParameterFault, Warning};

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
     are taken as exact, and events without precedent in the data are not covered.",
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
}

/// A fit and the forecast from it.
#[derive(Debug, Clone, PartialEq)]
pub struct OriginAnswer {
    /// The fit.
    pub fit: Fit,
    /// The forecast, one entry a date.
    pub forecast: Vec<DateForecast>,
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
    /// A rate is out of range.
    #[error("{0}")]
    Rate(ParameterFault),
}

/// Fits the evidence and forecasts from its newest snapshot; `cancelled` is asked between thresholds.
///
/// # Errors
/// When the evidence does not tell the mix, or nothing can be forecast from it.
pub fn answer(request: &OriginRequest, cancelled: &dyn Fn() -> bool) -> Result<OriginAnswer, OriginError> {
    if cancelled() {
        return Err(ForecastError::Cancelled.into());
    }
    let estimable = request.evidence.snapshots().len() > 1;
    if request.arrivals.is_none() && !estimable {
        return Err(OriginError::ArrivalsRequired);
    }
    let fit = fit(&request.evidence, &request.fit, cancelled)?;
    let scenario = scenario(request, &fit)?;
    let forecast = forecast(&request.evidence.latest().counts, &scenario, &request.plan, cancelled)?;
    let mut warnings = fit.warnings.clone();
    let reason = if scenario.model_error > DEFAULT_MODEL_ERROR {
        "as much as the fit itself misses the observed flows by"
    } else {
        "a stated default"
    };
    let detail = format!(
        "this network has no record of past forecasts, so intervals allow {:.0} % of each expected flow for model error, \
         {reason}",
        100.0 * scenario.model_error
    );
    warnings.push(Warning::new("model_error_assumed", detail));
    let fastest =
        request.arrivals.iter().flat_map(|plan| plan.segments()).map(|s| s.growth_per_year).fold(0.0, f64::max);
    if fastest > FAST_GROWTH {
        let detail = format!(
            "growth_per_year {fastest} multiplies arrivals by {} each year; 20 % a year is written 0.2",
            1.0 + fastest
        );
        warnings.push(Warning::new("arrivals_grow_fast", detail));
    }
    Ok(OriginAnswer { fit, forecast, warnings, cautions: CAUTIONS.to_vec() })
}

/// The forces that the fit and the request imply, and the directions in which the fit leaves them uncertain.
fn scenario(request: &OriginRequest, fit: &Fit) -> Result<Scenario, OriginError> {
    let estimated = fit.arrivals_per_day.and_then(|rate| ArrivalPlan::constant(rate.value).ok());
    let given = request.arrivals.is_some();
    let arrivals = request.arrivals.clone().or(estimated).ok_or(OriginError::ArrivalsRequired)?;
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
    let spread = fit.rate_excursion;
    if spread.links_per_arrival > 0.0 {
        let factor = spread.links_per_arrival.exp();
        let with = |links| forces.clone().with_links_per_arrival(links).map_err(OriginError::Rate);
        excursions.push(Excursion { low: with(links / factor)?, high: with(links * factor)? });
    }
    if spread.arrivals > 0.0 && !given {
        let factor = spread.arrivals.exp();
        let with = |factor: f64| forces.clone().with_arrivals(arrivals.scaled(factor));
        excursions.push(Excursion { low: with(factor.recip()), high: with(factor) });
    }
    // A fit that misses the very flows it was made from will miss the next ones by no less.
    let flow_error = fit.goodness.and_then(|g| g.flow_error).unwrap_or(0.0);
    Ok(Scenario { forces, excursions, model_error: flow_error.max(DEFAULT_MODEL_ERROR) })
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

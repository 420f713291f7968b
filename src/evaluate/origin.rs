//! One origin: fit the evidence up to a date, then forecast from it.

use crate::fit::{Candidate, Fit, FitError, FitRequest, Goodness, Model, Rung, TailPoint};
use crate::forecast::{CountForecast, DateForecast, ForecastError, TailForecast};
use crate::model::{ArrivalPlan, EntryDegrees, Estimate, Evidence, ForecastPlan, Interval, Warning};

/// Everything one forecast needs.
#[derive(Debug, Clone, PartialEq)]
pub struct OriginRequest {
    /// What is known of the network.
    pub evidence: Evidence,
    /// What is asked of the fit.
    pub fit: FitRequest,
    /// Arrivals from the last snapshot on; `None`: estimated from the snapshots.
    pub arrivals: Option<ArrivalPlan>,
    /// ι, link ends landing per present node and day.
    pub links_per_node_day: f64,
    /// δ, departure hazard of a node, 1/day.
    pub departures_per_node_day: f64,
    /// w, loss hazard of a link end, 1/day.
    pub link_losses_per_link_day: f64,
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
}

/// Fits the evidence alone. `interval_level` is the level of the estimates' intervals.
///
/// # Errors
/// When the evidence does not tell the mix.
pub fn fit_evidence(_evidence: &Evidence, _request: &FitRequest) -> Result<Fit, FitError> {
    Ok(stub_fit())
}

/// Fits the evidence and forecasts from its newest snapshot; `cancelled` is asked between dates.
///
/// # Errors
/// When the evidence does not tell the mix, or nothing can be forecast from it.
pub fn answer(request: &OriginRequest, cancelled: &dyn Fn() -> bool) -> Result<OriginAnswer, OriginError> {
    if cancelled() {
        return Err(ForecastError::Cancelled.into());
    }
    let count = |now: f64| CountForecast {
        now,
        expected: now * 1.1,
        median: now * 1.1,
        intervals: request.plan.levels().iter().map(|&level| Interval { level, low: now, high: now * 1.2 }).collect(),
    };
    let counts = &request.evidence.latest().counts;
    let forecast = request
        .plan
        .dates()
        .iter()
        .map(|&date| DateForecast {
            date,
            nodes: count(counts.nodes() as f64),
            links: count(counts.link_ends() as f64),
            largest_degree: count(counts.largest() as f64),
            tail: request
                .plan
                .thresholds()
                .iter()
                .map(|&threshold| TailForecast { threshold, size: count(counts.tail_size(threshold) as f64) })
                .collect(),
        })
        .collect();
    Ok(OriginAnswer { fit: stub_fit(), forecast, warnings: vec![Warning::new("stub", "stub")], cautions: vec!["stub"] })
}

fn stub_fit() -> Fit {
    Fit {
        model: Model::Mix,
        rung: Rung::OneSnapshot,
        preferential_share: Estimate { value: 0.7, interval: Some(Interval { level: 0.9, low: 0.6, high: 0.8 }) },
        share_excursion: (0.65, 0.75),
        links_per_arrival: Estimate::given(3.0),
        arrivals_per_day: None,
        rate_excursion: Default::default(),
        entry: EntryDegrees::single(0),
        tail_exponent: None,
        candidates: vec![Candidate {
            model: Model::Mix,
            preferential_share: 0.7,
            log_likelihood: -1.0,
            aic: 2.0,
            weight: 1.0,
        }],
        goodness: Some(Goodness {
            distance: 0.1,
            p_value: Some(0.5),
            replicates: 100,
            worst_log_ratio: 0.1,
            dispersion: None,
        }),
        tail: vec![TailPoint { degree: 1, observed: 1, fitted: 1.0 }],
        warnings: vec![],
    }
}

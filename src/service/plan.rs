//! A network's forecast plan as it is stored and answered.

mod arrivals;

use jiff::{Span, Timestamp};
use serde::{Deserialize, Serialize};

use arrivals::Arrivals;

use super::numbers::{date_of, date_text};
use super::{Real, ServiceError};
use crate::model::{Horizon, HorizonEnd, Levels, StandingPlan, Thresholds};

#[derive(Serialize, Deserialize)]
struct Plan {
    thresholds: Vec<u64>,
    horizon: PlanHorizon,
    levels: Vec<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    arrivals: Option<Arrivals>,
}

#[derive(Serialize, Deserialize)]
struct PlanHorizon {
    #[serde(skip_serializing_if = "Option::is_none")]
    until: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none")]
    ends_after: Option<String>,
    every: String,
}

/// A plan as it is stored, in the form in which it is given, defaults filled in.
pub fn to_json(plan: &StandingPlan) -> Result<String, serde_json::Error> {
    let (until, ends_after) = match plan.horizon.end {
        HorizonEnd::Until(until) => (Some(date_text(until)), None),
        HorizonEnd::After(span) => (None, Some(span.to_string())),
    };
    serde_json::to_string(&Plan {
        thresholds: plan.thresholds.values().to_vec(),
        horizon: PlanHorizon { until, ends_after, every: plan.horizon.every.to_string() },
        levels: plan.levels.values().iter().copied().map(Real).collect(),
        arrivals: plan.arrivals.as_ref().map(arrivals::stored),
    })
}

/// A plan as it was stored.
pub fn from_json(text: &str) -> Result<StandingPlan, ServiceError> {
    let plan: Plan = serde_json::from_str(text).map_err(|error| never_stored(&error))?;
    let span = |text: &str| text.parse::<Span>().map_err(|error| never_stored(&error));
    let end = match (&plan.horizon.until, &plan.horizon.ends_after) {
        (Some(until), _) => HorizonEnd::Until(date(until)?),
        (None, Some(after)) => HorizonEnd::After(span(after)?),
        (None, None) => return Err(never_stored(&"a horizon without an end")),
    };
    let levels: Vec<f64> = plan.levels.iter().map(|level| level.0).collect();
    Ok(StandingPlan {
        thresholds: Thresholds::new(&plan.thresholds).map_err(|_| never_stored(&"thresholds"))?,
        levels: Levels::new(&levels).map_err(|_| never_stored(&"levels"))?,
        horizon: Horizon { end, every: span(&plan.horizon.every)? },
        arrivals: plan.arrivals.map(arrivals::read).transpose()?,
    })
}

fn date(text: &str) -> Result<Timestamp, ServiceError> {
    date_of(text).ok_or_else(|| never_stored(&text))
}

fn never_stored(why: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a stored forecast plan that was never written: {why}"))
}

//! A network's forecast plan as it is stored and answered.

use jiff::{Span, Timestamp};
use serde::{Deserialize, Serialize};

use super::numbers::{date_of, date_text};
use super::{Real, ServiceError};
use crate::model::{Horizon, HorizonEnd, Levels, StandingArrivals, StandingPlan, StandingSegment, Thresholds};

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

#[derive(Serialize, Deserialize)]
#[serde(untagged)]
enum Arrivals {
    Segments { segments: Vec<Segment> },
    Rate(Segment),
}

#[derive(Serialize, Deserialize)]
struct Segment {
    #[serde(skip_serializing_if = "Option::is_none")]
    from: Option<String>,
    per_day: Real,
    growth_per_year: Real,
}

/// A plan as it is stored, in the form in which it is given, defaults filled in.
pub fn to_json(plan: &StandingPlan) -> Result<String, serde_json::Error> {
    let segment = |segment: &StandingSegment| Segment {
        from: segment.from.map(|from| from.to_string()),
        per_day: Real(segment.per_day),
        growth_per_year: Real(segment.growth_per_year),
    };
    let arrivals = plan.arrivals.as_ref().map(|arrivals| match arrivals.segments() {
        [only] if only.from.is_none() => Arrivals::Rate(segment(only)),
        segments => Arrivals::Segments { segments: segments.iter().map(segment).collect() },
    });
    let (until, ends_after) = match plan.horizon.end {
        HorizonEnd::Until(until) => (Some(date_text(until)), None),
        HorizonEnd::After(span) => (None, Some(span.to_string())),
    };
    serde_json::to_string(&Plan {
        thresholds: plan.thresholds.values().to_vec(),
        horizon: PlanHorizon { until, ends_after, every: plan.horizon.every.to_string() },
        levels: plan.levels.values().iter().copied().map(Real).collect(),
        arrivals,
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
    let segment = |segment: &Segment| {
        let from = segment.from.as_deref().map(date).transpose()?;
        Ok::<_, ServiceError>(StandingSegment {
            from,
            per_day: segment.per_day.0,
            growth_per_year: segment.growth_per_year.0,
        })
    };
    let segments = match &plan.arrivals {
        None => None,
        Some(Arrivals::Rate(rate)) => Some(vec![segment(rate)?]),
        Some(Arrivals::Segments { segments }) => Some(segments.iter().map(segment).collect::<Result<_, _>>()?),
    };
    let arrivals = segments.map(StandingArrivals::new).transpose();
    let levels: Vec<f64> = plan.levels.iter().map(|level| level.0).collect();
    Ok(StandingPlan {
        thresholds: Thresholds::new(&plan.thresholds).map_err(|_| never_stored(&"thresholds"))?,
        levels: Levels::new(&levels).map_err(|_| never_stored(&"levels"))?,
        horizon: Horizon { end, every: span(&plan.horizon.every)? },
        arrivals: arrivals.map_err(|_| never_stored(&"arrivals"))?,
    })
}

fn date(text: &str) -> Result<Timestamp, ServiceError> {
    date_of(text).ok_or_else(|| never_stored(&text))
}

fn never_stored(why: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a stored forecast plan that was never written: {why}"))
}

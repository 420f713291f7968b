//! What is asked of a backtest.

use serde::Serialize;
use serde_json::value::RawValue;
use utoipa::ToSchema;

use super::outlook::{levels_of, thresholds_of};
use super::schema::{levels, thresholds};
use crate::api::decode::{At, Faults, object, whole};
use crate::config::LimitsConfig;
use crate::model::{Levels, StandingPlan};
use crate::service::{BacktestRequest, DEFAULT_AHEAD, MOST_AHEAD};

/// What is asked of a backtest. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct BacktestBody {
    /// Those of the network's forecast_plan when left out; needed where it has none.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = thresholds)]
    pub thresholds: Option<Vec<u64>>,
    /// Snapshots after each origin to look ahead to; 3 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 1, maximum = 12)]
    pub ahead: Option<u64>,
    /// Levels of the intervals, each above 0 and at most 0.9999; 0.5 and 0.9 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = levels, required = false)]
    pub levels: Option<Vec<f64>>,
}

/// Reads what is asked of a backtest of a network with so many `snapshots`.
pub fn read_backtest(
    raw: &RawValue,
    standing: Option<&StandingPlan>,
    snapshots: usize,
    limits: &LimitsConfig,
    faults: &mut Faults,
) -> Option<BacktestRequest> {
    let root = At::ROOT;
    let body = object(raw, root, &["thresholds", "ahead", "levels"], faults)?;
    let thresholds = match (body.get("thresholds"), standing) {
        (None, Some(standing)) => Some(standing.thresholds.clone()),
        _ => body.required("thresholds", &root, faults).and_then(|raw| thresholds_of(raw, root, faults)),
    };
    let levels = match body.get("levels") {
        Some(raw) => levels_of(raw, root, faults),
        None => Some(Levels::default()),
    };
    let ahead = match body.get("ahead") {
        Some(raw) => ahead_of(raw, root.field("ahead"), faults),
        None => Some(DEFAULT_AHEAD),
    };
    let request = BacktestRequest { thresholds: thresholds?, ahead: ahead?, levels: levels? };
    let (thresholds, origins) = (request.thresholds.values().len(), snapshots.saturating_sub(2));
    let cells = thresholds.saturating_mul(request.ahead).saturating_mul(origins);
    if cells > limits.cells {
        let detail = format!(
            "{thresholds} thresholds from {origins} origins to {} dates each make {cells} forecasts; one backtest makes at most {}: \
             name fewer thresholds, or look less far ahead",
            request.ahead, limits.cells
        );
        faults.add(&root.field("thresholds"), detail);
        return None;
    }
    Some(request)
}

fn ahead_of(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<usize> {
    let ahead = whole(raw, at, u64::MAX, faults)?;
    let ahead = usize::try_from(ahead).ok().filter(|ahead| (1..=MOST_AHEAD).contains(ahead));
    if ahead.is_none() {
        faults.add(&at, format!("a backtest looks 1 to {MOST_AHEAD} snapshots ahead"));
    }
    ahead
}

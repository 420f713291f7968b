//! Backtests: asked for, found, listed, deleted. The work itself is a job.

mod document;
mod record;
mod words;

use serde::{Deserialize, Serialize};
use uuid::Uuid;

use super::networks::cut;
use super::{NetworkName, Real, Service, ServiceError, Thing, in_own_task};
use crate::model::{Levels, Thresholds};
use crate::store::{BacktestSummary, StoredBacktest};

pub(super) use document::document;
pub use document::{BacktestRun, CoverageRow, ErrorsAnswer, MemberErrors, PooledErrors, ScoreAnswer};
pub(super) use record::{from_json as record_from_json, to_json as record_to_json};

/// Periods that a backtest looks ahead at most.
pub const MOST_AHEAD: usize = 12;
/// Periods that it looks ahead when it is not said.
pub const DEFAULT_AHEAD: usize = 3;
/// Snapshots that a backtest takes at least: a period to learn from, an origin, and what came.
pub const FEWEST_SNAPSHOTS: usize = 3;

/// What is asked of a backtest.
#[derive(Debug, Clone)]
pub struct BacktestRequest {
    /// Hub thresholds.
    pub thresholds: Thresholds,
    /// Periods to look ahead, 1 to 12.
    pub ahead: usize,
    /// Levels of the intervals.
    pub levels: Levels,
}

#[derive(Serialize, Deserialize)]
struct KeptRequest {
    thresholds: Vec<u64>,
    ahead: usize,
    levels: Vec<Real>,
}

impl BacktestRequest {
    /// As it is kept with its job.
    pub(super) fn to_json(&self) -> Result<String, ServiceError> {
        let kept = KeptRequest {
            thresholds: self.thresholds.values().to_vec(),
            ahead: self.ahead,
            levels: self.levels.values().iter().copied().map(Real).collect(),
        };
        serde_json::to_string(&kept).map_err(|error| ServiceError::Broken(error.to_string()))
    }

    /// As it was kept.
    ///
    /// # Errors
    /// When it was never kept so.
    pub fn from_json(text: &str) -> Result<Self, ServiceError> {
        let kept: KeptRequest = serde_json::from_str(text).map_err(|error| never_kept(&error))?;
        let levels: Vec<f64> = kept.levels.iter().map(|level| level.0).collect();
        Ok(Self {
            thresholds: Thresholds::new(&kept.thresholds).map_err(|_| never_kept(&"thresholds"))?,
            ahead: kept.ahead,
            levels: Levels::new(&levels).map_err(|_| never_kept(&"levels"))?,
        })
    }
}

/// Why there is nothing to test on `snapshots` dates; none when there is enough.
pub(super) fn too_few(snapshots: usize) -> Option<ServiceError> {
    (snapshots < FEWEST_SNAPSHOTS).then(|| {
        ServiceError::Impossible(format!(
            "a backtest needs at least {FEWEST_SNAPSHOTS} snapshots: two to forecast from and a later one to hold that against; \
             the network has {snapshots}. PUT more under /v1/networks/{{name}}/snapshots/{{as_of}}, or a link list with every"
        ))
    })
}

impl Service {
    /// A backtest.
    ///
    /// # Errors
    /// When there is none with this id, or the database fails.
    pub async fn backtest_run(&self, id: Uuid) -> Result<StoredBacktest, ServiceError> {
        self.store.find_backtest(id).await?.ok_or(ServiceError::NotFound(Thing::Backtest))
    }

    /// Backtests of a network older than `before`, newest first, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn backtest_runs(
        &self,
        name: &NetworkName,
        before: Option<Uuid>,
        limit: u32,
    ) -> Result<(Vec<BacktestSummary>, bool), ServiceError> {
        self.network(name).await?;
        Ok(cut(self.store.list_backtests(name.as_str(), before, limit.saturating_add(1)).await?, limit))
    }

    /// Deletes a backtest. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is none with this id, `allows` refuses, or the database fails.
    pub async fn delete_backtest(
        &self,
        id: Uuid,
        allows: impl FnOnce(&str) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let store = self.store.clone();
        in_own_task(async move {
            match store.delete_backtest(id, allows).await? {
                Some(true) => Ok(()),
                Some(false) => Err(ServiceError::NotFound(Thing::Backtest)),
                None => Err(ServiceError::TagMismatch),
            }
        })
        .await
    }
}

fn never_kept(why: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a kept request for a backtest that was never written: {why}"))
}

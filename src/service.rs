//! Use cases: check, compute off the runtime within a time budget, keep the run, answer with what was kept.

mod answers;
mod compute;
mod cpu;
mod error;
mod inputs;
mod numbers;
mod runs;

use crate::config::{ComputeConfig, DatabaseConfig};
use crate::store::{Store, StoreError};

pub use crate::evaluate::OriginRequest;
pub use crate::fit::{FitRequest, Fixed, Model, ModelChoice, Rung};
pub use crate::store::{KeyClaim, RunFilter, RunKind, RunSummary, StoredRun};
pub use answers::{
    AttachmentAnswer, AttachmentModel, CandidateAnswer, CountAnswer, CurvePointAnswer, DateAnswer, DegreeAnswer,
    EstimateAnswer, EvidenceKind, FitAnswer, FitReport, FitRun, ForecastAnswer, ForecastRun, GoodnessAnswer,
    IntervalAnswer, LimitAnswer, OutlierClassAnswer, PeriodRatesAnswer, TailAnswer, TailPointAnswer, TransitionsAnswer,
    WarningAnswer,
};
pub use compute::{Question, answer_at_once};
pub use cpu::CpuPool;
pub use error::ServiceError;
pub use inputs::{FitInputs, ForecastInputs, Label, LabelFault, MAX_SEED, sha256_hex};
pub use numbers::{Count, Real, date_text};

/// The name and version every run carries.
pub const ENGINE: &str = concat!(env!("CARGO_PKG_NAME"), " ", env!("CARGO_PKG_VERSION"));

/// The use cases over one database.
#[derive(Debug, Clone)]
pub struct Service {
    store: Store,
    cpu: CpuPool,
}

impl Service {
    /// Opens the database, brings its tables up to date if so configured, and sizes the worker pool.
    ///
    /// # Errors
    /// When the database cannot be opened or migrated.
    pub async fn open(database: &DatabaseConfig, compute: &ComputeConfig) -> Result<Self, StoreError> {
        let store = Store::connect(database).await?;
        if database.migrate_on_start {
            store.migrate().await?;
        }
        Ok(Self { store, cpu: CpuPool::new(compute) })
    }

    /// Brings the database's tables up to date and closes it.
    ///
    /// # Errors
    /// When the database cannot be opened or migrated.
    pub async fn migrate(database: &DatabaseConfig) -> Result<(), StoreError> {
        let store = Store::connect(database).await?;
        let outcome = store.migrate().await;
        store.close().await;
        outcome
    }

    /// Whether requests can be served: the database answers, its tables are current, and it can be written.
    ///
    /// # Errors
    /// [`ServiceError::TablesOutdated`], [`ServiceError::StoreBusy`] or [`ServiceError::StoreUnavailable`]: whatever
    /// the database's fault, the service is not ready and nothing of the service is broken.
    pub async fn check_ready(&self) -> Result<(), ServiceError> {
        let ready = async {
            self.check_tables().await?;
            Ok(self.store.try_write().await?)
        };
        ready.await.map_err(|error| match error {
            ServiceError::Store(error) => ServiceError::StoreUnavailable(error),
            other => other,
        })
    }

    /// Whether the database answers and its tables are current.
    async fn check_tables(&self) -> Result<(), ServiceError> {
        if self.store.is_current().await? { Ok(()) } else { Err(ServiceError::TablesOutdated) }
    }

    /// Tells running computations to stop at their next step.
    pub fn cancel_all(&self) {
        self.cpu.stop();
    }

    /// Closes the database.
    pub async fn close(&self) {
        self.store.close().await;
    }
}

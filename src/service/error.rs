//! Why a use case has no answer.

use std::time::Duration;

use crate::evaluate::OriginError;
use crate::fit::FitError;
use crate::forecast::ForecastError;
use crate::store::StoreError;

/// Why a use case has no answer.
#[derive(Debug, thiserror::Error)]
pub enum ServiceError {
    /// No run has this id.
    #[error("there is no such run")]
    NotFound,
    /// The idempotency key belongs to another request body.
    #[error("the idempotency key was used with another request body")]
    KeyTaken,
    /// The run is not the one the caller named.
    #[error("the run does not match")]
    TagMismatch,
    /// Every worker is taken and the queue is full.
    #[error("every worker is taken and the queue is full")]
    Busy,
    /// The time budget ran out.
    #[error("the answer took longer than {} s", budget.as_secs())]
    TooSlow {
        /// The budget.
        budget: Duration,
    },
    /// One snapshot does not tell how many nodes arrive.
    #[error("one snapshot does not tell how many nodes arrive a day")]
    ArrivalsRequired,
    /// The evidence does not tell the mix.
    #[error("{0}")]
    NotIdentified(String),
    /// No network can do what is asked.
    #[error("{0}")]
    Impossible(String),
    /// A numerical method reached its cap.
    #[error("{0}")]
    NotConverged(String),
    /// The database's tables are not those of this version.
    #[error("the database's tables are not those of this version")]
    TablesOutdated,
    /// Another process holds the database for too long.
    #[error(transparent)]
    StoreBusy(StoreError),
    /// The database failed.
    #[error(transparent)]
    Store(StoreError),
    /// An invariant does not hold.
    #[error("{0}")]
    Broken(String),
}

/// Why a computation has no answer.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Unanswered {
    /// The core said so.
    #[error(transparent)]
    Core(#[from] OriginError),
    /// One snapshot and no arrivals.
    #[error("one snapshot does not tell how many nodes arrive a day")]
    ArrivalsRequired,
}

impl From<FitError> for Unanswered {
    fn from(error: FitError) -> Self {
        Self::Core(error.into())
    }
}

impl From<StoreError> for ServiceError {
    fn from(error: StoreError) -> Self {
        match error {
            StoreError::Busy(_) => Self::StoreBusy(error),
            _ => Self::Store(error),
        }
    }
}

impl ServiceError {
    /// The computation's failure; `budget` is what it had when it was cancelled.
    pub fn from_unanswered(unanswered: Unanswered, budget: Duration) -> Self {
        match unanswered {
            Unanswered::ArrivalsRequired => Self::ArrivalsRequired,
            Unanswered::Core(OriginError::Fit(FitError::NotIdentified { detail })) => Self::NotIdentified(detail),
            Unanswered::Core(OriginError::Forecast(ForecastError::Impossible { detail })) => Self::Impossible(detail),
            Unanswered::Core(OriginError::Forecast(ForecastError::Cancelled)) => Self::TooSlow { budget },
            Unanswered::Core(
                error @ (OriginError::Fit(FitError::NotConverged { .. })
                | OriginError::Forecast(ForecastError::NotConverged { .. })),
            ) => Self::NotConverged(error.to_string()),
        }
    }
}

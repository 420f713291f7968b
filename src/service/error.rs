//! Why a use case has no answer.

use std::time::Duration;

use crate::evaluate::OriginError;
use crate::fit::FitError;
use crate::forecast::ForecastError;
use crate::growth::GrowthError;
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
    /// The database's file is gone, or can be neither read nor written as it stands.
    #[error(transparent)]
    StoreUnavailable(StoreError),
    /// The database failed.
    #[error(transparent)]
    Store(StoreError),
    /// An invariant does not hold.
    #[error("{0}")]
    Broken(String),
}

impl From<StoreError> for ServiceError {
    fn from(error: StoreError) -> Self {
        match error {
            StoreError::Busy(_) => Self::StoreBusy(error),
            StoreError::NoTable(_) => Self::TablesOutdated,
            StoreError::Gone { .. } | StoreError::Unusable(_) => Self::StoreUnavailable(error),
            _ => Self::Store(error),
        }
    }
}

impl ServiceError {
    /// The core's failure; `budget` is what it had when it was cancelled.
    pub fn from_core(error: OriginError, budget: Duration) -> Self {
        match error {
            OriginError::ArrivalsRequired => Self::ArrivalsRequired,
            OriginError::Rate(fault) => Self::Impossible(fault.to_string()),
            OriginError::Fit(FitError::NotIdentified { detail }) => Self::NotIdentified(detail),
            OriginError::Fit(FitError::NotConverged { detail }) => Self::NotConverged(detail),
            OriginError::Fit(FitError::Cancelled) | OriginError::Forecast(ForecastError::Cancelled) => {
                Self::TooSlow { budget }
            }
            OriginError::Fit(FitError::Growth(growth)) | OriginError::Forecast(ForecastError::Growth(growth)) => {
                match growth {
                    GrowthError::NobodyStarts | GrowthError::TooFast { .. } | GrowthError::TooLarge { .. } => {
                        Self::Impossible(growth.to_string())
                    }
                    GrowthError::Inversion(_) | GrowthError::Integration { .. } => {
                        Self::NotConverged(growth.to_string())
                    }
                }
            }
        }
    }
}

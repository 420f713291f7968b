//! Why a use case has no answer.

use std::time::Duration;

use crate::evaluate::OriginError;
use crate::fit::FitError;
use crate::forecast::ForecastError;
use crate::growth::GrowthError;
use crate::store::{Clash, StoreError, WriteError};

/// Why a use case has no answer.
#[derive(Debug, thiserror::Error)]
pub enum ServiceError {
    /// There is no such thing.
    #[error("there is no such {0:?}")]
    NotFound(Thing),
    /// The idempotency key belongs to another request body.
    #[error("the idempotency key was used with another request body")]
    KeyTaken,
    /// What stands there is not what the caller named.
    #[error("what stands there does not match")]
    TagMismatch,
    /// It does not fit what is stored of the network.
    #[error("it does not fit what is stored")]
    Clash(Clash),
    /// Nothing is stored of the network that a run could start from.
    #[error("the network has no snapshot")]
    NoSnapshot,
    /// Scenarios that the network does not have.
    #[error("there are no scenarios {0:?}")]
    NoScenarios(Vec<String>),
    /// The network has no scenario to compare.
    #[error("the network has no scenario")]
    NothingToCompare,
    /// The network has no plan, and none is given.
    #[error("the network has no forecast_plan")]
    NoPlan,
    /// The network has no forecast yet, for this reason.
    #[error("the network has no forecast yet: {0}")]
    NoForecast(String),
    /// The operator has listed no address that notices may go to.
    #[error("this service sends no notices: whoever runs it lists no address in notices.destinations")]
    NoticesOff,
    /// The operator has not listed the address.
    #[error("its address is not among those that whoever runs this service lists in notices.destinations")]
    NotListed,
    /// The operator has listed no database that sources may count in.
    #[error("this service runs no sources: whoever runs it lists no database in sources.databases")]
    SourcesOff,
    /// The operator has not listed the database.
    #[error("its database is not among those that whoever runs this service lists in sources.databases")]
    NoDatabase {
        /// The names of those that are.
        known: Vec<String>,
    },
    /// The operator's bounds do not allow what a source asks for.
    #[error("{detail}")]
    SourceBounds {
        /// The field that asks for it.
        field: &'static str,
        /// What they allow.
        detail: String,
    },
    /// The run of a source that was asked for has failed.
    #[error("{0}")]
    SourceFailed(String),
    /// Every worker is taken and the queue is full.
    #[error("every worker is taken and the queue is full")]
    Busy {
        /// About how long it takes until what waits is done.
        wait: Duration,
    },
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
    /// The process is about to stop.
    #[error("the process is about to stop")]
    Stopping,
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

/// What can be kept here, and so be missing.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Thing {
    /// A forecast or fit.
    Run,
    /// A tracked network.
    Network,
    /// A network's snapshot.
    Snapshot,
    /// A network's table of transitions.
    Transitions,
    /// A network's attachment statistics.
    LinkEvents,
    /// A job.
    Job,
    /// A backtest.
    Backtest,
    /// A limit kept with a network.
    Limit,
    /// A scenario kept with a network.
    Scenario,
    /// A notice kept with a network.
    Notice,
    /// A network's source.
    Source,
}

impl From<StoreError> for ServiceError {
    fn from(error: StoreError) -> Self {
        match error {
            StoreError::Busy(_) => Self::StoreBusy(error),
            StoreError::NoTable(_) => Self::TablesOutdated,
            StoreError::Gone { .. }
            | StoreError::Full(_)
            | StoreError::ReadOnly(_)
            | StoreError::Damaged(_)
            | StoreError::Unusable(_) => Self::StoreUnavailable(error),
            _ => Self::Store(error),
        }
    }
}

impl ServiceError {
    /// A write's failure; `thing` is what it was about.
    pub fn from_write(error: WriteError, thing: Thing) -> Self {
        match error {
            WriteError::NoNetwork => Self::NotFound(Thing::Network),
            WriteError::Missing => Self::NotFound(thing),
            WriteError::Mismatch => Self::TagMismatch,
            WriteError::Clash(clash) => Self::Clash(clash),
            WriteError::Store(error) => error.into(),
        }
    }

    /// The core's failure; `budget` is what it had when it was cancelled.
    pub fn from_core(error: OriginError, budget: Duration) -> Self {
        match error {
            OriginError::ArrivalsRequired => Self::ArrivalsRequired,
            OriginError::NoPeriod => Self::Impossible(error.to_string()),
            OriginError::Passage(error) => Self::Broken(error.to_string()),
            OriginError::Unplanned(detail) => Self::Impossible(detail),
            OriginError::Rate(fault) => Self::Impossible(fault.to_string()),
            OriginError::Fit(FitError::NotIdentified { detail }) => Self::NotIdentified(detail),
            OriginError::Fit(FitError::NotConverged { detail }) => Self::NotConverged(detail),
            OriginError::Fit(FitError::Cancelled) | OriginError::Forecast(ForecastError::Cancelled) => {
                Self::TooSlow { budget }
            }
            OriginError::Fit(FitError::Growth(growth)) | OriginError::Forecast(ForecastError::Growth(growth)) => {
                match growth {
                    GrowthError::Cancelled => Self::TooSlow { budget },
                    GrowthError::NobodyStarts
                    | GrowthError::TooFast { .. }
                    | GrowthError::TooLarge { .. }
                    | GrowthError::CapNeedsAlike
                    | GrowthError::NoNodeLaw => Self::Impossible(growth.to_string()),
                    GrowthError::Inversion(_) | GrowthError::Integration { .. } | GrowthError::CapUnsettled => {
                        Self::NotConverged(growth.to_string())
                    }
                }
            }
        }
    }
}

//! Puts fit and forecast together at an origin date, and scores forecasts against what came true.

mod account;
mod drift;
mod origin;
mod scores;

pub use account::{Account, Outcome, OutcomeSummary, account};
pub use drift::{DRIFT_TEST_LEVEL, DriftCause, DriftTest, FitRecord, IssuedAccount, drift_test};
pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};

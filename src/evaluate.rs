//! Puts fit and forecast together at an origin date, and scores forecasts against what came true.

mod origin;
mod scores;

pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};

//! Puts fit and forecast together at an origin date, and (later) scores forecasts against what came after.

mod origin;

pub use origin::{OriginAnswer, OriginError, OriginRequest, answer, fit_evidence};

//! Puts fit and forecast together at an origin date.

mod origin;

pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};

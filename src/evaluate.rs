//! Puts fit and forecast together at an origin date, and scores forecasts against what came true.

mod arrivals;
mod origin;
mod rates;
mod scores;

pub use arrivals::{ArrivalForecast, arrival_periods, forecast_arrivals, forecast_links_per_arrival, link_periods};
pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use rates::{RateHistory, RateOutlook, RatePeriod};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};

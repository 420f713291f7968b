//! Puts fit and forecast together at an origin date, keeps a record of what came of it, and pools by the record; forecasts
//! arrivals.

mod account;
mod arrivals;
mod backtest;
mod drift;
mod member;
mod origin;
mod pool;
mod rates;
mod record;
mod scores;
mod spread;

pub use account::{Account, Outcome, OutcomeSummary, account};
pub use arrivals::{ArrivalForecast, arrival_periods, forecast_arrivals, forecast_links_per_arrival, link_periods};
pub use backtest::{Case, Observed, Replay, replay};
pub use drift::{DRIFT_TEST_LEVEL, DriftCause, DriftTest, FitRecord, IssuedAccount, drift_test};
pub use member::{Member, Step, Totals, Trend};
pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use pool::{Pool, PoolShare, pool, pooled_size};
pub use rates::{RateHistory, RateOutlook, RatePeriod};
pub use record::{Growth, LawSizes, OriginRecord, Outlook, Target, record};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};
pub use spread::{DEFAULT_FLOW_ERROR, Spread};

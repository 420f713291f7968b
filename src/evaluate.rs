//! Puts fit and forecast together at an origin date, keeps a record of what came of it, and pools by the record.

mod backtest;
mod member;
mod origin;
mod pool;
mod record;
mod scores;
mod spread;

pub use backtest::{Case, Observed, Replay, replay};
pub use member::{Member, Step, Totals, Trend};
pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use pool::{Pool, PoolShare, pool, pooled_size};
pub use record::{Growth, LawSizes, OriginRecord, Outlook, Target, record};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};
pub use spread::{DEFAULT_FLOW_ERROR, Spread};

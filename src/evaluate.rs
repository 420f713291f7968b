//! Puts fit and forecast together at an origin date, keeps a record of what came of it, and pools by the record.

mod member;
mod origin;
mod pool;
mod record;

pub use member::{Member, Step, Totals, Trend};
pub use origin::{OriginAnswer, OriginError, OriginRequest, answer};
pub use pool::{Pool, PoolShare, pool, pooled_size};
pub use record::{Growth, LawSizes, OriginRecord, Outlook, Target, record};

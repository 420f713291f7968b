//! Puts fit and forecast together at an origin date, keeps a record of what came of it, and pools by the record; forecasts
//! arrivals.

mod account;
mod ahead;
mod arrivals;
mod backtest;
mod costs;
mod crossing;
mod drift;
mod hubs;
mod limits;
mod member;
mod origin;
mod pool;
mod pooled;
mod prospect;
mod questions;
mod rates;
mod record;
mod scenarios;
mod scores;
mod spread;
mod sustainable;
mod table;
mod watched;

pub use account::{Account, Outcome, OutcomeSummary, account};
pub use ahead::Rates;
pub use arrivals::{ArrivalForecast, arrival_periods, forecast_arrivals, forecast_links_per_arrival, link_periods};
pub use backtest::{Case, Observed, Replay, replay};
pub use drift::{DRIFT_TEST_LEVEL, DriftCause, DriftTest, FitRecord, IssuedAccount, drift_test};
pub use member::{Member, Step, Totals, Trend};
pub use origin::{
    OriginAnswer, OriginError, OriginRequest, answer, answer_by, fit_origin, forecast_by, is_pooled, past_records_of,
};
pub use pool::{Pool, PoolShare, pooled_size};
pub use pooled::{PoolUse, SCORED_AHEAD, past_records, scored_origins};
pub use questions::{
    AmountForecast, Answers, BandAmounts, BandsAnswer, BandsAtDate, ClassAnswer, ClassAtDate, ClassPassing, DateAt,
    DegreeAtDate, HubRank, HubsAtDate, LimitAnswer, LimitAtDate, NodeAnswer, PassedAtDate, Passing, ScenarioAnswer,
    ScenarioAtDate, Sustainable, TailDifference, WatchAnswer, answers_by,
};
pub use rates::{RateHistory, RateOutlook, RatePeriod};
pub use record::{Growth, LawSizes, OriginRecord, Outlook, Rate, RecordPlan, Target, record};
pub use scores::{Coverage, LOG_ERROR_FLOOR, absolute_error, crps, interval_score, log_error};
pub use spread::{DEFAULT_FLOW_ERROR, Spread};
pub use table::{Errors, Judged, ScoreRow, Scores, score_table};

//! Validated domain types: what enters the core cannot hold nonsense.
//!
//! Every constructor parses; none of these types can be built with a non-finite number, an unsorted list or a sum
//! that overflows. Times are kept as `jiff::Timestamp` at the edges and as days since an origin inside the core.

mod arrival_spread;
mod arrivals;
mod counts;
mod entry;
mod estimate;
mod evidence;
mod link_events;
mod parameters;
mod plan;
mod questions;
mod seasons;
mod standing_arrivals;
mod standing_plan;
mod transitions;

pub use arrival_spread::ArrivalSpread;
pub use arrivals::{ArrivalFault, ArrivalPlan, ArrivalSegment};
pub use counts::{CountsFault, CountsFaultKind, DegreeCounts, DegreeKind, MAX_DEGREE};
pub use entry::{EntryDegrees, EntryFault};
pub use estimate::{Estimate, Interval, Warning};
pub use evidence::{Evidence, EvidenceFault, MAX_SNAPSHOTS, Snapshot};
pub use link_events::{AttachmentCell, AttachmentWindow, LinkEvents, LinkEventsFault, RatioClass};
pub use parameters::{
    AttachmentMix, GrowthParameters, MAX_DORMANT_SHARE, MAX_GROWTH_VARIANCE, MAX_KERNEL_EXPONENT, ParameterFault,
};
pub use plan::{ForecastPlan, Levels, PlanFault, Thresholds};
pub use questions::{
    Band, Bands, Change, DegreeCap, Limit, MAX_BANDS, MAX_LIMITS, MAX_NEXT_HUBS, MAX_SCENARIOS, MAX_WATCHED,
    QuestionFault, Questions, RefusedLinks, Shift, Watch, WatchedClass, WatchedNode,
};
pub use seasons::{Campaign, Seasons};
pub use standing_arrivals::{StandingArrivals, StandingSegment};
pub use standing_plan::{Horizon, HorizonEnd, StandingPlan};
pub use transitions::{Move, Transitions, TransitionsFault};

/// Days from `origin` to `time`, as a real number; negative when `time` is earlier.
pub fn days_between(origin: jiff::Timestamp, time: jiff::Timestamp) -> f64 {
    const NANOSECONDS_PER_DAY: f64 = 86_400.0 * 1e9;
    // Both are at most a few times 10^20 ns, so the difference is exact in i128 and rounds once to f64.
    (time.as_nanosecond() - origin.as_nanosecond()) as f64 / NANOSECONDS_PER_DAY
}

/// Mean length of a Gregorian year in days, the unit behind every "per year" rate.
pub const DAYS_PER_YEAR: f64 = 365.2425;

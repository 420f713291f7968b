//! The arrival plan: how many new nodes arrive, and when.

use std::fmt;

use super::DAYS_PER_YEAR;

/// The fastest growth accepted: a hundredfold a year.
const MAX_GROWTH_PER_YEAR: f64 = 99.0;
/// The largest standard deviation of ln of the rates: seven times more or less in either direction.
const MAX_LOG_DEVIATION: f64 = 2.0;

/// One stretch of an arrival plan: from `from_day` on, `per_day` arrivals a day at its start, growing (or shrinking)
/// by the factor `1 + growth_per_year` a year, continuously compounded.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ArrivalSegment {
    /// Start, days since the plan's origin (the last snapshot).
    pub from_day: f64,
    /// Arrivals a day at the start of the segment.
    pub per_day: f64,
    /// Relative growth of the rate a year: 0.2 is 20 % more each year; above −1.
    pub growth_per_year: f64,
}

impl ArrivalSegment {
    /// Exponential growth rate of the arrival rate, 1/day.
    pub fn log_growth(&self) -> f64 {
        self.growth_per_year.ln_1p() / DAYS_PER_YEAR
    }
}

/// A piecewise exponential arrival rate A(t), nodes a day; the last segment goes on for ever. Its rates may be uncertain: all of
/// them together by one log-normal factor whose median is 1.
///
/// ```
/// use tailcast::model::ArrivalPlan;
/// let plan = ArrivalPlan::constant(40.0).unwrap();
/// assert_eq!(plan.rate(12.0), 40.0);
/// assert_eq!(plan.arrivals_between(0.0, 10.0), 400.0);
/// ```
#[derive(Debug, Clone, PartialEq)]
pub struct ArrivalPlan {
    segments: Vec<ArrivalSegment>,
    log_deviation: f64,
}

/// What is wrong with an arrival plan, and where.
#[derive(Debug, Clone, PartialEq)]
pub struct ArrivalFault {
    /// The list at fault: `segments`, `months`, `weeks` or `campaigns`.
    pub list: &'static str,
    /// Index of the offending item, of `weeks` the ISO week itself; `None` for what is no item of a list.
    pub index: Option<usize>,
    /// The field at fault within the item, such as `per_day`; empty where the item is a bare number. Without an index the field of
    /// the plan.
    pub field: &'static str,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for ArrivalFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

impl ArrivalFault {
    pub(super) fn of_segment(index: Option<usize>, field: &'static str, detail: impl Into<String>) -> Self {
        Self { list: "segments", index, field, detail: detail.into() }
    }

    pub(super) fn of_plan(field: &'static str, detail: impl Into<String>) -> Self {
        Self::of_segment(None, field, detail)
    }
}

impl ArrivalPlan {
    /// The largest arrival rate accepted, nodes a day: above it N would pass 2^64 within a lifetime of a plan.
    pub const MAX_PER_DAY: f64 = 1e15;

    /// The same rate for ever.
    ///
    /// # Errors
    /// When the rate is negative, not finite or absurdly large.
    pub fn constant(per_day: f64) -> Result<Self, Vec<ArrivalFault>> {
        Self::from_segments(&[ArrivalSegment { from_day: 0.0, per_day, growth_per_year: 0.0 }])
    }

    /// Nobody arrives.
    pub fn none() -> Self {
        let segment = ArrivalSegment { from_day: 0.0, per_day: 0.0, growth_per_year: 0.0 };
        Self { segments: vec![segment], log_deviation: 0.0 }
    }

    /// A plan of segments in ascending `from_day`; the first must start at or before day 0.
    ///
    /// # Errors
    /// Every fault of every segment.
    pub fn from_segments(segments: &[ArrivalSegment]) -> Result<Self, Vec<ArrivalFault>> {
        let mut faults = Vec::new();
        if segments.is_empty() {
            faults.push(ArrivalFault::of_plan("segments", "the plan has no segment; give at least one"));
        }
        for (i, s) in segments.iter().enumerate() {
            let mut fault = |field, detail: String| faults.push(ArrivalFault::of_segment(Some(i), field, detail));
            if !(s.per_day.is_finite() && (0.0..=Self::MAX_PER_DAY).contains(&s.per_day)) {
                let most = Self::MAX_PER_DAY;
                fault("per_day", format!("arrivals per day must lie between 0 and {most:e}, not {}", s.per_day));
            }
            if !(s.growth_per_year > -1.0 && s.growth_per_year <= MAX_GROWTH_PER_YEAR) {
                let detail = format!(
                    "growth per year must be above -1 and at most {MAX_GROWTH_PER_YEAR}, not {} (0.2 means 20 % a year)",
                    s.growth_per_year
                );
                fault("growth_per_year", detail);
            }
            if !s.from_day.is_finite() {
                fault("from", "the start of the segment is not a date".into());
            } else if i == 0 && s.from_day > 0.0 {
                fault("from", "the first segment must start at or before the last snapshot".into());
            } else if i > 0 && s.from_day <= segments[i - 1].from_day {
                fault(
                    "from",
                    "segments must be in ascending order of their start, each later than the one before".into(),
                );
            }
        }
        if faults.is_empty() { Ok(Self { segments: segments.to_vec(), log_deviation: 0.0 }) } else { Err(faults) }
    }

    /// The same plan with rates that are uncertain by a common factor: `log_deviation` is the standard deviation of its ln; 0 for
    /// rates that are certain. The rates of the plan are the medians.
    ///
    /// # Errors
    /// When it does not lie between 0 and 2.
    pub fn with_log_deviation(mut self, log_deviation: f64) -> Result<Self, ArrivalFault> {
        if !(0.0..=MAX_LOG_DEVIATION).contains(&log_deviation) {
            let detail = format!(
                "the rates would be uncertain by a factor of {} at one standard deviation; at most {:.1} is taken: a plan this \
                 vague tells nothing",
                log_deviation.exp(),
                MAX_LOG_DEVIATION.exp()
            );
            return Err(ArrivalFault::of_plan("log_deviation", detail));
        }
        self.log_deviation = log_deviation;
        Ok(self)
    }

    /// Standard deviation of ln of the factor by which all rates are uncertain.
    pub fn log_deviation(&self) -> f64 {
        self.log_deviation
    }

    /// The plans at one standard deviation below and above; none where the rates are certain.
    pub fn sides(&self) -> Option<(Self, Self)> {
        let factor = self.log_deviation.exp();
        (self.log_deviation > 0.0).then(|| (self.scaled(factor.recip()), self.scaled(factor)))
    }

    /// The segments, ascending.
    pub fn segments(&self) -> &[ArrivalSegment] {
        &self.segments
    }

    /// Arrival rate A(t), nodes a day, `day` days after the origin.
    pub fn rate(&self, day: f64) -> f64 {
        let s = self.segment_at(day);
        s.per_day * (s.log_growth() * (day - s.from_day)).exp()
    }

    /// Expected arrivals between two days, ∫A dt; zero when `to` is not after `from`.
    pub fn arrivals_between(&self, from: f64, to: f64) -> f64 {
        if to <= from {
            return 0.0;
        }
        let mut total = 0.0;
        let mut edges = vec![from];
        edges.extend(self.segments.iter().map(|s| s.from_day).filter(|&d| d > from && d < to));
        edges.push(to);
        for pair in edges.windows(2) {
            let (a, b) = (pair[0], pair[1]);
            let growth = self.segment_at(a).log_growth() * (b - a);
            // ∫ e^{γτ} dτ over the stretch = length · (e^x − 1)/x with x = γ·length
            let stretch = if growth == 0.0 { 1.0 } else { growth.exp_m1() / growth };
            total += self.rate(a) * (b - a) * stretch;
        }
        total
    }

    /// The same rates, taken as exact.
    pub fn certain(self) -> Self {
        Self { log_deviation: 0.0, ..self }
    }

    /// The same plan with every rate multiplied by `factor` (≥ 0).
    pub fn scaled(&self, factor: f64) -> Self {
        let segments = self.segments.iter().map(|s| ArrivalSegment { per_day: s.per_day * factor, ..*s }).collect();
        Self { segments, log_deviation: self.log_deviation }
    }

    fn segment_at(&self, day: f64) -> &ArrivalSegment {
        let after = self.segments.partition_point(|s| s.from_day <= day);
        &self.segments[after.saturating_sub(1)]
    }
}

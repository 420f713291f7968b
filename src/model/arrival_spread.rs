//! How uncertain planned arrivals are, in the ways a planner says it.

use super::{ArrivalFault, ArrivalPlan};

/// Standard normal quantile at 0.95: a central range of 90 % is twice as many standard deviations wide.
const NORMAL_95: f64 = 1.644_853_626_951_472_7;

/// How uncertain the rates of a plan are, all of them together by one log-normal factor. The planned rates stay the medians.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum ArrivalSpread {
    /// Standard deviation in nodes a day, of a plan that is a rate.
    StandardDeviation(f64),
    /// Central range of 90 % in nodes a day, low and high, of a plan that is a rate. Its width counts: ln(high/low).
    Range(f64, f64),
    /// Standard deviation over the rate, of any plan.
    Relative(f64),
}

impl ArrivalSpread {
    /// The field in which it is given.
    pub fn field(&self) -> &'static str {
        match self {
            Self::StandardDeviation(_) => "standard_deviation",
            Self::Range(..) => "range",
            Self::Relative(_) => "relative_deviation",
        }
    }

    /// Standard deviation of ln of the rates; `per_day` is the rate of a plan that is one.
    ///
    /// Formula: √ln(1 + r²), r the standard deviation over the rate; of a range ln(high/low)/(2·1.6449).
    ///
    /// # Errors
    /// A number that is negative or not finite, a range that is no range about the rate, a form that needs a rate and has none, and
    /// more than a plan takes.
    ///
    /// ```
    /// use tailcast::model::ArrivalSpread;
    /// let spread = ArrivalSpread::Range(35.0, 50.0);
    /// assert!((spread.log_deviation(Some(42.0)).unwrap() - 0.1084).abs() < 1e-4);
    /// ```
    pub fn log_deviation(&self, per_day: Option<f64>) -> Result<f64, ArrivalFault> {
        let fault = |detail: String| ArrivalFault::of_plan(self.field(), detail);
        let rated = || {
            let detail = format!("{} goes with per_day; with segments give relative_deviation", self.field());
            per_day.ok_or_else(|| fault(detail))
        };
        let log_deviation = match *self {
            Self::StandardDeviation(deviation) => {
                let rate = rated()?;
                if !(deviation.is_finite() && deviation >= 0.0) || (rate <= 0.0 && deviation > 0.0) {
                    let detail =
                        format!("a standard deviation is 0 or more, and 0 where per_day is; it is {deviation} here");
                    return Err(fault(detail));
                }
                if deviation == 0.0 { 0.0 } else { of_relative(deviation / rate) }
            }
            Self::Range(low, high) => {
                let rate = rated()?;
                if !(low > 0.0 && low <= rate && rate <= high && high.is_finite()) {
                    let detail = format!(
                        "a range is [low, high] with 0 < low ≤ per_day ≤ high, not [{low}, {high}] about {rate}; nine times in \
                         ten the rate lies within it"
                    );
                    return Err(fault(detail));
                }
                (high / low).ln() / (2.0 * NORMAL_95)
            }
            Self::Relative(deviation) => {
                if !(deviation.is_finite() && deviation >= 0.0) {
                    let detail = format!("a relative deviation is 0 or more, not {deviation}; write 0.1 for 10 %");
                    return Err(fault(detail));
                }
                of_relative(deviation)
            }
        };
        let checked = ArrivalPlan::none().with_log_deviation(log_deviation);
        checked.map(|_| log_deviation).map_err(|found| fault(found.detail))
    }
}

/// √ln(1 + r²), the log-normal law's own.
fn of_relative(deviation: f64) -> f64 {
    // r² of a number that is finite may overflow; ln(1 + r²) is 2·ln r then.
    if deviation > 1e8 { (2.0 * deviation.ln()).sqrt() } else { deviation.powi(2).ln_1p().sqrt() }
}

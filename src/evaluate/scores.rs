//! Scores of forecast counts against what came true. All but the log error are in units of the count, smaller is better, and
//! none can be bettered in expectation by stating another law than the believed one (proper scores).

use crate::forecast::CountLaw;
use crate::model::Interval;
use crate::numerics::intervals::binomial_share;
use crate::numerics::ranked_score::ranked_score;

/// Counts below this enter a log error as this: ln 0 has no value, and a node more or less is chance there. Common practice,
/// no source.
pub const LOG_ERROR_FLOOR: f64 = 1.0;

/// Computes the continuous ranked probability score (CRPS) of a forecast law, in nodes.
///
/// Formula: ∫ (F(t) − 1{t ≥ observed})² dt; [`ranked_score`] has the method, accuracy and references. A law without variance
/// scores its absolute error.
///
/// ```
/// use tailcast::{evaluate::crps, forecast::CountLaw};
/// let certain = CountLaw::new(7.0, 0.0, 0.0);
/// assert_eq!(crps(&certain, 9.0), 2.0);
/// // A vague forecast is charged for its vagueness even where its middle came true.
/// let (sharp, vague) = (CountLaw::new(0.0, 50.0, 50.0), CountLaw::new(0.0, 50.0, 500.0));
/// assert!(crps(&sharp, 50.0) < crps(&vague, 50.0));
/// ```
pub fn crps(law: &CountLaw, observed: f64) -> f64 {
    let rest = law.rest();
    if rest.mean == 0.0 || rest.variance == 0.0 {
        return absolute_error(law.floor() + rest.mean.round(), observed);
    }
    ranked_score(&rest, observed - law.floor())
}

/// Computes |forecast − observed|, which is the CRPS of a plain number.
pub fn absolute_error(forecast: f64, observed: f64) -> f64 {
    (forecast - observed).abs()
}

/// Computes the interval score of a central interval, in nodes: its width, plus 2/(1 − level) times what the outcome lies
/// outside of it.
///
/// Reference: Winkler 1972; Gneiting & Raftery 2007, eq. 43, doi:10.1198/016214506000001437.
///
/// ```
/// use tailcast::{evaluate::interval_score, model::Interval};
/// let interval = Interval { level: 0.9, low: 10.0, high: 30.0 };
/// assert_eq!(interval_score(&interval, 20.0), 20.0);
/// assert!((interval_score(&interval, 33.0) - (20.0 + 20.0 * 3.0)).abs() < 1e-9);
/// ```
pub fn interval_score(interval: &Interval, observed: f64) -> f64 {
    let missed = (interval.low - observed).max(observed - interval.high).max(0.0);
    interval.high - interval.low + 2.0 / (1.0 - interval.level) * missed
}

/// Computes ln(forecast/observed): positive where too much was forecast. Either side counts as one node where it is less.
///
/// ```
/// use tailcast::evaluate::log_error;
/// assert!((log_error(110.0, 100.0) - 1.1f64.ln()).abs() < 1e-15);
/// assert_eq!((log_error(0.0, 0.0), log_error(0.3, 1.0)), (0.0, 0.0));
/// ```
pub fn log_error(forecast: f64, observed: f64) -> f64 {
    (forecast.max(LOG_ERROR_FLOOR) / observed.max(LOG_ERROR_FLOOR)).ln()
}

/// How many outcomes fell inside their intervals.
///
/// ```
/// use tailcast::{evaluate::Coverage, model::Interval};
/// let mut coverage = Coverage::default();
/// coverage.count(&Interval { level: 0.9, low: 10.0, high: 30.0 }, 30.0);
/// coverage.count(&Interval { level: 0.9, low: 10.0, high: 30.0 }, 31.0);
/// assert_eq!((coverage.inside, coverage.cases, coverage.share()), (1, 2, Some(0.5)));
/// ```
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Coverage {
    /// Outcomes inside, ends included.
    pub inside: u64,
    /// All outcomes.
    pub cases: u64,
}

impl Coverage {
    /// Counts one outcome.
    pub fn count(&mut self, interval: &Interval, observed: f64) {
        self.inside += u64::from(interval.low <= observed && observed <= interval.high);
        self.cases += 1;
    }

    /// Adds another count.
    pub fn add(&mut self, other: Self) {
        self.inside += other.inside;
        self.cases += other.cases;
    }

    /// Share of outcomes inside; `None` before the first.
    pub fn share(&self) -> Option<f64> {
        (self.cases > 0).then(|| self.inside as f64 / self.cases as f64)
    }

    /// Interval of the true share (Clopper & Pearson 1934), as if the cases were independent: those of one network at
    /// neighbouring thresholds and dates are not, and the true interval is then wider. `None` before the first case.
    pub fn bounds(&self, level: f64) -> Option<Interval> {
        let (low, high) = binomial_share(self.inside as f64, self.cases as f64, level);
        (self.cases > 0).then_some(Interval { level, low, high })
    }
}

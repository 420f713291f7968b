//! The law of a forecast count, given its mean and variance, and its quantiles.

use statrs::distribution::{ContinuousCDF, StudentsT};

use crate::model::Interval;
use crate::numerics::elementary::normal_quantile;
use crate::numerics::gamma::gamma_quantile;
use crate::numerics::roots::increasing_root;
use crate::numerics::two_moments::TwoMoments;

/// Means above this take their quantiles from the continuous limit; a whole node then matters less than 10⁻⁵.
const CONTINUOUS_ABOVE: f64 = 1e5;
/// Standard deviation of the uncertain rate over the mean beyond which a law says nothing more.
const WIDEST_SPREAD: f64 = 3.0;
/// A quantile is sought up to this, 2^52: above, counts no longer step by one.
const FARTHEST: f64 = (1_u64 << 52) as f64;

/// A count `floor + R`, R a whole number ≥ 0 with the given mean and variance: negative binomial when the variance exceeds
/// the mean (a Poisson count whose rate is uncertain), Poisson when they agree, binomial below (present nodes that may or
/// may not pass a threshold).
///
/// ```
/// use tailcast::forecast::CountLaw;
/// let poisson = CountLaw::new(0.0, 4.0, 4.0);
/// assert_eq!((poisson.quantile(0.05), poisson.quantile(0.5), poisson.quantile(0.95)), (1.0, 4.0, 8.0));
/// ```
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CountLaw {
    floor: f64,
    mean: f64,
    variance: f64,
    /// How much is known of the variance; infinite when it is taken as known.
    degrees_of_freedom: f64,
}

impl CountLaw {
    /// A law with the certain part `floor`, and mean and variance of the rest; negative rounding residue counts as zero,
    /// and a spread beyond three times the mean as that.
    pub fn new(floor: f64, mean: f64, variance: f64) -> Self {
        let mean = mean.max(0.0);
        let variance = variance.clamp(0.0, mean + (WIDEST_SPREAD * mean).powi(2));
        Self { floor, mean, variance, degrees_of_freedom: f64::INFINITY }
    }

    /// A law of three cumulants: of a count that may fall as well as rise, so that nothing of it is certain.
    ///
    /// Formula: with ρ the variance of the rest over its mean, the third cumulant of each of these laws is variance·(2ρ − 1); the
    /// floor, a whole number, is where ρ = (1 + κ₃/variance)/2.
    ///
    /// ```
    /// use tailcast::forecast::CountLaw;
    /// // As many nodes leave a tail of 100 as enter it: the count is symmetric about 100.
    /// let law = CountLaw::of_cumulants(100.0, 8.0, 0.0);
    /// assert!((law.at_most(99.0) + law.at_most(100.0) - 1.0).abs() < 1e-9);
    /// ```
    pub fn of_cumulants(mean: f64, variance: f64, third: f64) -> Self {
        let skewed = 0.5 * (1.0 + third / variance);
        let floor = (mean - variance / skewed).round();
        if skewed > 0.0 && floor > 0.0 {
            Self::new(floor, mean - floor, variance)
        } else {
            Self::new(0.0, mean, variance)
        }
    }

    /// The same, its variance known only as well as so many past misses tell it (at least 1): intervals are wider in the proportion
    /// of Student's quantile to the normal one, the more so the higher their level.
    pub fn with_degrees_of_freedom(self, degrees_of_freedom: f64) -> Self {
        Self { degrees_of_freedom: degrees_of_freedom.max(1.0), ..self }
    }

    /// The same knowledge of the variance, with another certain part, mean and variance of the rest.
    pub(super) fn with_moments(self, floor: f64, mean: f64, variance: f64) -> Self {
        Self::new(floor, mean, variance).with_degrees_of_freedom(self.degrees_of_freedom)
    }

    /// How much is known of the variance: degrees of freedom of Student's law, infinite when it is taken as known.
    pub fn degrees_of_freedom(&self) -> f64 {
        self.degrees_of_freedom
    }

    /// P(count ≤ `most`) were the variance known; 0 or 1 where the count is certain.
    ///
    /// ```
    /// use tailcast::forecast::CountLaw;
    /// assert!((CountLaw::new(3.0, 2.0, 2.0).at_most(3.0) - (-2f64).exp()).abs() < 1e-14);
    /// ```
    pub fn at_most(&self, most: f64) -> f64 {
        let spare = most - self.floor;
        if self.mean == 0.0 || self.variance == 0.0 {
            return f64::from(self.mean.round() <= spare);
        }
        if spare < 0.0 { 0.0 } else { self.rest().at_most(spare.floor()) }
    }

    /// P(count > `most`), the variance known only as well as its degrees of freedom say: the place of `most` in standard normal units
    /// is looked up in Student's law, as intervals do.
    pub fn above(&self, most: f64) -> f64 {
        if self.mean == 0.0 || self.variance == 0.0 {
            return f64::from(self.mean.round() > most - self.floor);
        }
        let spare = (most - self.floor).floor();
        if spare < 0.0 {
            return 1.0;
        }
        let known = self.rest().above(spare);
        match StudentsT::new(0.0, 1.0, self.degrees_of_freedom) {
            Ok(law) if self.degrees_of_freedom.is_finite() && known > 0.0 && known < 1.0 => {
                law.cdf(normal_quantile(known))
            }
            _ => known,
        }
    }

    /// The certain part.
    pub fn floor(&self) -> f64 {
        self.floor
    }

    /// Expectation and variance of what comes on top of the certain part.
    pub fn rest(&self) -> TwoMoments {
        TwoMoments { mean: self.mean, variance: self.variance }
    }

    /// Smallest count x with P(count ≤ x) ≥ `probability`, for a probability in (0, 1).
    ///
    /// # Numerical notes
    /// From a Cornish–Fisher guess by the probabilities of the counts in between, exact to the unit against scipy where checked
    /// (means to 5,000); above means of 10⁵ the quantile of a gamma law, by root finding or, once the standard deviation is
    /// a third of the mean or less, the Wilson–Hilferty approximation, within 0.1 % of scipy's negative binomial.
    pub fn quantile(&self, probability: f64) -> f64 {
        if self.mean == 0.0 || self.variance == 0.0 {
            return self.floor + self.mean.round();
        }
        if self.mean > CONTINUOUS_ABOVE {
            return self.floor + gamma_quantile(self.mean, self.variance, probability).round();
        }
        self.floor + self.first(probability, |at| at.at_most >= probability)
    }

    /// Central intervals at `levels`, whole nodes, the median always inside.
    ///
    /// Formula: from the smallest x with G(x) ≥ (1 − level)/2 to the largest with G(x) ≤ (1 + level)/2, G(x) = P(count < x) +
    /// ½·P(count = x) the mid-distribution function (Parzen 2004; Ma, Genton & Parzen 2011, doi:10.1007/s10463-009-0225-6). Ends
    /// by plain quantiles would count both end nodes as inside in full, and cover far more than the level where counts are few.
    pub fn intervals(&self, levels: &[f64]) -> Vec<Interval> {
        let median = self.quantile(0.5);
        let interval = |&level: &f64| {
            let upper = 0.5 + 0.5 * level;
            let wide = Self::new(self.floor, self.mean, self.variance * self.student_factor(upper).powi(2));
            let (low, high) = wide.mid_range(0.5 - 0.5 * level, upper);
            Interval { level, low: low.min(median), high: high.max(median) }
        };
        levels.iter().map(interval).collect()
    }

    /// Student's over the normal quantile at `probability`.
    fn student_factor(&self, probability: f64) -> f64 {
        match StudentsT::new(0.0, 1.0, self.degrees_of_freedom) {
            Ok(law) if self.degrees_of_freedom.is_finite() => {
                law.inverse_cdf(probability) / normal_quantile(probability)
            }
            _ => 1.0,
        }
    }

    fn mid_range(&self, low: f64, high: f64) -> (f64, f64) {
        if self.mean == 0.0 || self.variance == 0.0 || self.mean > CONTINUOUS_ABOVE {
            return (self.quantile(low), self.quantile(high));
        }
        let from = self.first(low, |at| at.twice_mid() >= 2.0 * low);
        (self.floor + from, self.floor + self.first(high, |at| at.twice_mid() > 2.0 * high) - 1.0)
    }

    /// Smallest whole x ≥ 0 from which on the increasing condition holds, near the quantile of `probability`.
    fn first(&self, probability: f64, holds: impl Fn(&Standing) -> bool) -> f64 {
        let (mut below, mut reach, mut stride) = (-1.0, f64::INFINITY, STEPS);
        let mut from = self.cornish_fisher(probability).clamp(0.0, FARTHEST).floor();
        loop {
            let mut at = Standing::new(self.rest(), from);
            if holds(&at) {
                while from - at.count < STEPS {
                    reach = at.count;
                    if reach - below <= 1.0 {
                        return reach;
                    }
                    at.step_down();
                    if !holds(&at) {
                        return reach;
                    }
                }
                reach = at.count;
            } else {
                while at.count - from < STEPS {
                    at.step_up();
                    if holds(&at) || at.count >= reach || at.count >= FARTHEST {
                        return at.count;
                    }
                }
                below = at.count;
            }
            // The guess was far off: leap, and halve what lies between.
            stride *= 4.0;
            let leap = if reach.is_finite() { (reach - stride).max(below + 1.0) } else { below + stride };
            let middle = (0.5 * (below + reach)).floor();
            from = if reach.is_finite() && below >= 0.0 { middle } else { leap };
        }
    }

    /// The quantile by four cumulants (Cornish & Fisher 1938), within a few counts unless the law is very skewed.
    fn cornish_fisher(&self, probability: f64) -> f64 {
        let (z, deviation) = (normal_quantile(probability), self.variance.sqrt());
        let ratio = self.variance / self.mean;
        let skewness = (2.0 * ratio - 1.0) / deviation;
        let excess = (1.0 + 6.0 * ratio * (ratio - 1.0)) / self.variance;
        let square = z * z;
        let bent = z + (square - 1.0) * skewness / 6.0 + z * (square - 3.0) * excess / 24.0
            - z * (2.0 * square - 5.0) * skewness * skewness / 36.0;
        let guess = self.mean + deviation * bent - 0.5;
        if guess.is_finite() { guess } else { self.mean }
    }
}

/// Counts that are reached one by one before the distribution function is computed anew.
const STEPS: f64 = 64.0;

/// A count with its probabilities, moved one by one.
struct Standing {
    law: TwoMoments,
    count: f64,
    at_most: f64,
    exactly: f64,
}

impl Standing {
    fn new(law: TwoMoments, count: f64) -> Self {
        Self { law, count, at_most: law.at_most(count), exactly: law.probability(count) }
    }

    /// Twice the mid-distribution function.
    fn twice_mid(&self) -> f64 {
        2.0 * self.at_most - self.exactly
    }

    fn step_up(&mut self) {
        if self.law.next_over(self.count + 1.0) <= 0.0 {
            // The last count of a binomial law.
            *self = Self::new(self.law, self.count + 1.0);
            return;
        }
        self.exactly = (self.exactly * self.law.next_over(self.count)).max(0.0);
        self.count += 1.0;
        self.at_most = (self.at_most + self.exactly).min(1.0);
    }

    /// Not below 0.
    fn step_down(&mut self) {
        if self.law.next_over(self.count) <= 0.0 {
            *self = Self::new(self.law, self.count - 1.0);
            return;
        }
        self.at_most -= self.exactly;
        self.count -= 1.0;
        self.exactly /= self.law.next_over(self.count);
    }
}

/// Smallest whole x in [low, high] at which the increasing `f` is at least zero: sought first in ln(1 + x), then settled to
/// the unit, or to 10⁻⁵ relative where that is more.
pub(crate) fn first_whole(low: f64, high: f64, mut f: impl FnMut(f64) -> f64) -> f64 {
    const LOG_SEARCH: f64 = 1e-4;
    const SETTLED: f64 = 1e-5;
    if f(low) >= 0.0 {
        return low;
    }
    let log_root = increasing_root(low.ln_1p(), high.ln_1p(), LOG_SEARCH, |y| f(y.exp_m1()));
    let guess = log_root.exp_m1().round().clamp(low, high);
    let slack = (2.0 * LOG_SEARCH * guess).ceil();
    let (mut below, mut reach) = ((guess - slack).max(low), (guess + slack).min(high));
    while reach - below > (SETTLED * guess).max(1.0) {
        let middle = (0.5 * (below + reach)).floor();
        if f(middle) >= 0.0 { reach = middle } else { below = middle }
    }
    reach
}

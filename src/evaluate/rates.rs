//! Forecasts of a positive rate from what past periods showed of it: arrivals a day, links per arrival.

use crate::numerics::elementary::normal_cdf;
use crate::numerics::roots::increasing_root;

/// Standard deviation of ln(rate)'s lasting step from one period to the next, the models tried.
const STEPS: [f64; 7] = [0.03, 0.06, 0.12, 0.25, 0.5, 1.0, 2.0];
/// The step believed likeliest before anything is seen, and the standard deviation of its logarithm. A stated default: common
/// practice, no source; ten snapshots of a real network moved by 5 to 20 % a period.
const LIKELY_STEP: (f64, f64) = (0.12, 1.0);
/// Standard deviation of what does not last, the models tried.
const NOISES: [f64; 4] = [0.0, 0.05, 0.15, 0.3];
/// Standard deviation of the trend a period, the models tried.
const TRENDS: [f64; 3] = [0.0, 0.1, 0.3];
/// What is left of a trend one period later.
const DAMPING: f64 = 0.9;
/// The farthest that a trend carries a rate: a factor of three. What grew sixfold seldom does so again.
const TREND_REACH: f64 = 1.098_612_288_668_109_8; // ln 3
/// Older periods than this many say nothing of the next.
const MOST_PERIODS: usize = 24;
/// Events from which their logarithm is taken as normal.
const MANY_EVENTS: f64 = 50.0;
/// The first period seen counts as at least this many events.
const HALF_EVENT: f64 = 0.5;
/// The standard deviation is read off the central interval of 80 %, whose ends lie this many of them away.
const NORMAL_90: f64 = 1.281_551_565_544_6;
/// The largest standard deviation of ln(rate) given: e^{±1.5} is a factor of 20 between low and high.
const WIDEST: f64 = 1.5;

/// What one period shows of a rate: `events`, in so much `exposure`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RatePeriod {
    /// Length, days; positive.
    pub days: f64,
    /// Events counted or inferred, such as arrivals or landed links; below zero counts as none.
    pub events: f64,
    /// What the rate is per: days for arrivals a day, arrivals for links per arrival. Without exposure the period shows nothing.
    pub exposure: f64,
}

/// The mean of a rate over some days ahead.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RateOutlook {
    /// Its middle value (geometric mean of what is believed); positive.
    pub rate: f64,
    /// Standard deviation of its logarithm, at most 1.5.
    pub log_deviation: f64,
}

/// What a rate's history says of its future.
///
/// Formula: ln(rate) is a level that takes a random step each period, with a damped trend (Gardner & McKenzie 1985) and passing
/// noise; events are Poisson. Eighty-four such models of different steps, trends and noise are filtered (Kalman 1960; few
/// events by the mode of their likelihood, West, Harrison & Migon 1985) and averaged by how well each foretold the history,
/// beside a stated prior: with a single period the prior alone says how wide.
///
/// The time unit is the geometric mean period, so a history in other units of time gives the same answer.
///
/// ```
/// use tailcast::evaluate::{RateHistory, RatePeriod};
/// let month = RatePeriod { days: 30.0, events: 1_200.0, exposure: 30.0 };
/// let steady = RateHistory::new(&[month; 6]).unwrap();
/// assert!((steady.mean_over(90.0).rate / 40.0 - 1.0).abs() < 1e-9);
/// assert!(steady.mean_over(365.0).log_deviation > steady.mean_over(30.0).log_deviation);
/// ```
#[derive(Debug, Clone, PartialEq)]
pub struct RateHistory {
    filtered: Vec<Filtered>,
    /// Days of a typical period.
    unit: f64,
    /// Days from the middle of the newest period with exposure to the end of the history.
    since_middle: f64,
    periods: usize,
    newest_rate: f64,
}

impl RateHistory {
    /// Reads contiguous periods, oldest first. `None` when none has exposure.
    pub fn new(periods: &[RatePeriod]) -> Option<Self> {
        let sound = |p: &&RatePeriod| p.days > 0.0 && p.days.is_finite();
        let periods: Vec<RatePeriod> = periods.iter().filter(sound).copied().collect();
        let recent = periods.get(periods.len().saturating_sub(MOST_PERIODS)..)?;
        let unit = (recent.iter().map(|p| p.days.ln()).sum::<f64>() / recent.len() as f64).exp();
        let mut seen: Vec<Seen> = Vec::new();
        let mut elapsed = 0.0;
        for period in recent {
            let middle = elapsed + 0.5 * period.days;
            elapsed += period.days;
            if period.exposure > 0.0 && period.exposure.is_finite() && period.events.is_finite() {
                seen.push(Seen { middle: middle / unit, events: period.events.max(0.0), exposure: period.exposure });
            }
        }
        let newest = *seen.last()?;
        let filtered = grid().map(|model| model.filter(&seen)).collect();
        Some(Self {
            filtered,
            unit,
            since_middle: elapsed - newest.middle * unit,
            periods: seen.len(),
            newest_rate: newest.events / newest.exposure,
        })
    }

    /// The mean rate over the `days` (≥ 0) after the newest period.
    pub fn mean_over(&self, days: f64) -> RateOutlook {
        let days = days.max(0.0);
        let gap = (self.since_middle + 0.5 * days) / self.unit;
        // Passing noise lasts a period; over several it cancels out.
        let passing = self.unit / days.max(self.unit);
        let most = self.filtered.iter().map(|f| f.log_likelihood).fold(f64::NEG_INFINITY, f64::max);
        let mut parts: Vec<(f64, f64, f64)> = Vec::with_capacity(self.filtered.len());
        for filtered in &self.filtered {
            let (mean, variance) = filtered.ahead(gap, passing);
            parts.push(((filtered.log_likelihood - most).exp(), mean, variance.sqrt()));
        }
        let total: f64 = parts.iter().map(|&(weight, ..)| weight).sum();
        let mean = parts.iter().map(|&(weight, mean, _)| weight * mean).sum::<f64>() / total;
        // Read off the 80 % that lie nearest: the few models of giant steps would make the second moment alone far too wide.
        let within = |reach: f64| {
            let inside = |&(weight, own, deviation): &(f64, f64, f64)| {
                weight * (normal_cdf((mean + reach - own) / deviation) - normal_cdf((mean - reach - own) / deviation))
            };
            parts.iter().map(inside).sum::<f64>() / total - 0.8
        };
        let log_deviation = increasing_root(0.0, WIDEST * NORMAL_90, 1e-9, within) / NORMAL_90;
        RateOutlook { rate: mean.exp(), log_deviation }
    }

    /// Days of a typical period.
    pub fn period_days(&self) -> f64 {
        self.unit
    }

    /// Periods used.
    pub fn periods(&self) -> usize {
        self.periods
    }

    /// The rate in the newest period used.
    pub fn newest_rate(&self) -> f64 {
        self.newest_rate
    }
}

#[derive(Debug, Clone, Copy)]
struct Seen {
    /// Middle of the period, in typical periods.
    middle: f64,
    events: f64,
    exposure: f64,
}

#[derive(Debug, Clone, Copy, PartialEq)]
struct Model {
    step: f64,
    noise: f64,
    trend: f64,
}

/// A model after the history: level and trend, their covariance, and ln(prior × likelihood).
#[derive(Debug, Clone, Copy, PartialEq)]
struct Filtered {
    model: Model,
    level: f64,
    trend: f64,
    level_variance: f64,
    covariance: f64,
    trend_variance: f64,
    log_likelihood: f64,
}

fn grid() -> impl Iterator<Item = Model> {
    let noises = |step| NOISES.into_iter().map(move |noise| (step, noise));
    let trends = |(step, noise)| TRENDS.into_iter().map(move |trend| Model { step, noise, trend });
    STEPS.into_iter().flat_map(noises).flat_map(trends)
}

impl Model {
    fn filter(self, seen: &[Seen]) -> Filtered {
        let (likely, spread) = LIKELY_STEP;
        let mut state = Filtered {
            model: self,
            level: 0.0,
            trend: 0.0,
            level_variance: 0.0,
            covariance: 0.0,
            trend_variance: self.trend * self.trend,
            log_likelihood: -0.5 * ((self.step / likely).ln() / spread).powi(2),
        };
        let mut before: Option<f64> = None;
        for period in seen {
            match before {
                None => {
                    let events = period.events.max(HALF_EVENT);
                    state.level = (events / period.exposure).ln();
                    state.level_variance = events.recip() + self.noise * self.noise;
                }
                Some(middle) => {
                    state.step(period.middle - middle);
                    state.see(period);
                }
            }
            before = Some(period.middle);
        }
        state
    }
}

impl Filtered {
    /// Moves `gap` periods on.
    fn step(&mut self, gap: f64) {
        let (carried, left) = carry(gap);
        let Model { step, trend, .. } = self.model;
        self.level += carried * self.trend;
        self.level_variance += carried * (2.0 * self.covariance + carried * self.trend_variance) + step * step * gap;
        self.covariance = left * (self.covariance + carried * self.trend_variance);
        self.trend *= left;
        self.trend_variance = left * left * self.trend_variance + trend * trend * (1.0 - left * left);
    }

    /// Takes in what a period shows.
    fn see(&mut self, period: &Seen) {
        let noise = self.model.noise * self.model.noise;
        let expected = self.level_variance + noise;
        let (shown, counting) = if period.events >= MANY_EVENTS {
            let (shown, counting) = ((period.events / period.exposure).ln(), period.events.recip());
            let error = shown - self.level;
            self.log_likelihood -= 0.5 * ((expected + counting).ln() + error * error / (expected + counting));
            (shown, counting)
        } else {
            let (mode, events) = self.mode(period, expected);
            let error = mode - self.level;
            self.log_likelihood +=
                period.events * mode - events - 0.5 * (error * error / expected + (1.0 + expected * events).ln());
            // The observation that would lead to this mode with this curvature.
            (mode + (period.events - events) / events, events.recip())
        };
        let total = expected + counting;
        let (error, variance, covariance) = (shown - self.level, self.level_variance, self.covariance);
        self.level += variance / total * error;
        self.trend += covariance / total * error;
        self.level_variance -= variance * variance / total;
        self.covariance -= variance * covariance / total;
        self.trend_variance -= covariance * covariance / total;
    }

    /// The likeliest ln(rate) of a period with few events, given that it is normal about the level, and the events expected
    /// there.
    fn mode(&self, period: &Seen, variance: f64) -> (f64, f64) {
        const LEAST_EVENTS: f64 = 1e-3;
        let seen = (period.events.max(LEAST_EVENTS) / period.exposure).ln();
        let slope =
            |log_rate: f64| (log_rate - self.level) / variance - period.events + period.exposure * log_rate.exp();
        let low = seen.min(self.level - variance);
        let mode = increasing_root(low, seen.max(self.level), 1e-9, slope);
        (mode, period.exposure * mode.exp())
    }

    /// Mean and variance of ln(rate) `gap` periods on, where `passing` is the share of noise that is left.
    fn ahead(&self, gap: f64, passing: f64) -> (f64, f64) {
        let mut later = *self;
        later.step(gap);
        let moved = (later.level - self.level).clamp(-TREND_REACH, TREND_REACH);
        (self.level + moved, later.level_variance + self.model.noise * self.model.noise * passing)
    }
}

/// How far a trend of one a period carries in `gap` periods, and what is left of it.
fn carry(gap: f64) -> (f64, f64) {
    let left = DAMPING.powf(gap);
    (DAMPING * (1.0 - left) / (1.0 - DAMPING), left)
}

#[cfg(test)]
mod tests {
    use super::{LIKELY_STEP, Model, Seen};

    /// Kalman filter of filterpy (tests/reference/rates.py).
    #[test]
    fn a_damped_trend_is_filtered_as_an_independent_library_does() {
        let table = include_str!("../../tests/reference/rates.csv");
        for row in table.lines().skip(1) {
            let columns: Vec<&str> = row.split(',').collect();
            let number = |i: usize| columns[i].parse::<f64>().unwrap();
            let seen = columns[3].split(' ').enumerate().map(|(i, events)| Seen {
                middle: i as f64,
                events: events.parse().unwrap(),
                exposure: 30.0,
            });
            let model = Model { step: number(0), noise: number(1), trend: number(2) };
            let found = model.filter(&seen.collect::<Vec<_>>());
            let (likely, spread) = LIKELY_STEP;
            let prior = -0.5 * ((model.step / likely).ln() / spread).powi(2);
            let ours =
                [found.level, found.trend, found.level_variance, found.trend_variance, found.log_likelihood - prior];
            for (i, own) in ours.into_iter().enumerate() {
                assert!((own - number(4 + i)).abs() < 1e-9 * (1.0 + number(4 + i).abs()), "{row}: {own} in column {i}");
            }
        }
    }
}

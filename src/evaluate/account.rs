//! An issued forecast held against a later snapshot.

use jiff::Timestamp;

use super::{Coverage, interval_score, log_error};
use crate::forecast::{CountForecast, DateForecast};
use crate::model::{Interval, Snapshot, days_between};

/// A count that was forecast, and what came.
#[derive(Debug, Clone, PartialEq)]
pub struct Outcome {
    /// What came.
    pub observed: f64,
    /// The expectation that was stated.
    pub expected: f64,
    /// The median that was stated.
    pub median: f64,
    /// The central intervals that were stated, ascending in level.
    pub intervals: Vec<Interval>,
}

/// What one snapshot showed of one forecast.
#[derive(Debug, Clone, PartialEq)]
pub struct Account {
    /// The snapshot's date.
    pub as_of: Timestamp,
    /// Days from the forecast's origin to it.
    pub days_ahead: f64,
    /// Nodes.
    pub nodes: Outcome,
    /// Link ends.
    pub links: Outcome,
    /// Threshold and tail size, thresholds ascending.
    pub tail: Vec<(u64, Outcome)>,
}

/// Outcomes summed up.
#[derive(Debug, Clone, PartialEq)]
pub struct OutcomeSummary {
    /// How many.
    pub outcomes: u64,
    /// Mean of ln(expected/observed): positive where too much was forecast.
    pub mean_log_error: f64,
    /// Mean of |ln(expected/observed)|.
    pub mean_absolute_log_error: f64,
    /// Mean weighted interval score, nodes.
    pub weighted_interval_score: f64,
    /// Level and coverage, levels ascending.
    pub coverage: Vec<(f64, Coverage)>,
}

/// Holds the forecast made at `origin` against a snapshot; `None` where it says nothing of the snapshot's date: at or before
/// the origin, or after the last date forecast.
///
/// Formula: snapshots rarely fall on a date that was forecast, so between the two dates around the snapshot everything
/// stated is interpolated linearly in time, the origin's own counts being the first date. Interval ends are then rounded
/// to whole nodes: outwards, they would cover more than their level. Before the first date this takes a standard deviation to grow in
/// proportion to time, which suits the allowance for model error and is too narrow where chance alone is at work.
pub fn account(origin: Timestamp, forecast: &[DateForecast], snapshot: &Snapshot) -> Option<Account> {
    let days_ahead = days_between(origin, snapshot.as_of);
    let after = forecast.iter().position(|at| at.date >= snapshot.as_of)?;
    let (end, start) = (forecast.get(after)?, after.checked_sub(1).and_then(|before| forecast.get(before)));
    if days_ahead <= 0.0 {
        return None;
    }
    let begun = start.map_or(0.0, |start| days_between(origin, start.date));
    let share = (days_ahead - begun) / (days_between(origin, end.date) - begun);
    let outcome = |observed, start: Option<&CountForecast>, end: &CountForecast| between(start, end, share, observed);
    let counts = &snapshot.counts;
    let tail = end.tail.iter().enumerate().map(|(i, row)| {
        let start = start.and_then(|start| start.tail.get(i)).map(|row| &row.size);
        (row.threshold, outcome(counts.tail_size(row.threshold) as f64, start, &row.size))
    });
    Some(Account {
        as_of: snapshot.as_of,
        days_ahead,
        nodes: outcome(counts.nodes() as f64, start.map(|at| &at.nodes), &end.nodes),
        links: outcome(counts.link_ends() as f64, start.map(|at| &at.links), &end.links),
        tail: tail.collect(),
    })
}

/// What was stated at `share` of the way from one date to the next; without a date to start from, from the origin's counts.
fn between(start: Option<&CountForecast>, end: &CountForecast, share: f64, observed: f64) -> Outcome {
    let at = |start: f64, end: f64| if share >= 1.0 { end } else { start + share * (end - start) };
    let interval = |(i, end_interval): (usize, &Interval)| {
        let start = start.and_then(|start| start.intervals.get(i));
        let (low, high) = start.map_or((end.now, end.now), |start| (start.low, start.high));
        let (low, high) = (at(low, end_interval.low).round(), at(high, end_interval.high).round());
        Interval { level: end_interval.level, low, high }
    };
    Outcome {
        observed,
        expected: at(start.map_or(end.now, |start| start.expected), end.expected),
        median: at(start.map_or(end.now, |start| start.median), end.median),
        intervals: end.intervals.iter().enumerate().map(interval).collect(),
    }
}

impl Outcome {
    /// ln(expected/observed): positive where too much was forecast.
    pub fn log_error(&self) -> f64 {
        log_error(self.expected, self.observed)
    }

    /// Whether it came within an interval, ends included.
    pub fn is_inside(&self, interval: &Interval) -> bool {
        interval.low <= self.observed && self.observed <= interval.high
    }

    /// Computes the weighted interval score of the median and the K intervals, in nodes; smaller is better. It approximates
    /// the continuous ranked probability score of the law they were taken from, which is not kept.
    ///
    /// Formula: (½·|observed − median| + Σ (1 − level)/2 · interval score) / (K + ½).
    ///
    /// Reference: Bracher, Ray, Gneiting & Reich 2021, PLoS Comput. Biol. 17, e1008618, eq. 1.
    ///
    /// ```
    /// use tailcast::{evaluate::Outcome, model::Interval};
    /// let intervals = vec![Interval { level: 0.5, low: 8.0, high: 12.0 }, Interval { level: 0.9, low: 5.0, high: 15.0 }];
    /// let outcome = Outcome { observed: 16.0, expected: 10.0, median: 10.0, intervals };
    /// // ½·6 + ¼·(4 + 4·4) + 1/20·(10 + 20·1), over 2½
    /// assert!((outcome.weighted_interval_score() - 9.5 / 2.5).abs() < 1e-12);
    /// ```
    pub fn weighted_interval_score(&self) -> f64 {
        let weighted = |interval: &Interval| 0.5 * (1.0 - interval.level) * interval_score(interval, self.observed);
        let total = 0.5 * (self.observed - self.median).abs() + self.intervals.iter().map(weighted).sum::<f64>();
        total / (self.intervals.len() as f64 + 0.5)
    }
}

impl OutcomeSummary {
    /// Sums outcomes up; `None` when there are none.
    pub fn of<'o>(outcomes: impl IntoIterator<Item = &'o Outcome>) -> Option<Self> {
        let (mut count, mut signed, mut absolute, mut score) = (0u64, 0.0, 0.0, 0.0);
        let mut coverage: Vec<(f64, Coverage)> = Vec::new();
        for outcome in outcomes {
            count += 1;
            signed += outcome.log_error();
            absolute += outcome.log_error().abs();
            score += outcome.weighted_interval_score();
            for interval in &outcome.intervals {
                let at = coverage.iter().position(|(level, _)| *level == interval.level);
                let at = at.unwrap_or_else(|| {
                    coverage.push((interval.level, Coverage::default()));
                    coverage.len() - 1
                });
                if let Some((_, covered)) = coverage.get_mut(at) {
                    covered.count(interval, outcome.observed);
                }
            }
        }
        coverage.sort_by(|a, b| a.0.total_cmp(&b.0));
        let mean = |sum: f64| sum / count as f64;
        (count > 0).then(|| Self {
            outcomes: count,
            mean_log_error: mean(signed),
            mean_absolute_log_error: mean(absolute),
            weighted_interval_score: mean(score),
            coverage,
        })
    }
}

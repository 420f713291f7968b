//! The course of one tail through history and forecast, read from an answer.

use super::ChartError;
use super::panel::Bar;
use super::words::{at_least, days};
use crate::service::{ForecastAnswer, IntervalAnswer};

/// Nodes at or above a threshold, by days since 1970.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Course {
    pub threshold: u64,
    /// Counted, oldest first.
    pub counted: Vec<(f64, f64)>,
    /// Forecast, dates ascending.
    pub ahead: Vec<Ahead>,
}

/// A forecast of a tail at a date.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Ahead {
    pub day: f64,
    /// The date as the answer has it.
    pub date: String,
    pub now: f64,
    pub expected: f64,
    pub median: f64,
    pub intervals: Vec<IntervalAnswer>,
}

impl Course {
    /// The course of the tail at a threshold.
    pub(super) fn of(answer: &ForecastAnswer, threshold: u64) -> Self {
        let counted = answer.history.iter().filter_map(|past| {
            let tail = past.tail.iter().find(|tail| tail.threshold == threshold)?;
            Some((days(&past.as_of)?, tail.nodes as f64))
        });
        let ahead = answer.forecast.iter().filter_map(|at| {
            let tail = at.tail.iter().find(|tail| tail.threshold == threshold)?;
            let (now, expected, median) = (tail.now.0, tail.expected.0, tail.median.0);
            let intervals = tail.intervals.clone();
            Some(Ahead { day: days(&at.date)?, date: at.date.clone(), now, expected, median, intervals })
        });
        Self { threshold, counted: counted.collect(), ahead: ahead.collect() }
    }

    /// What is counted now: in the newest snapshot.
    pub(super) fn now(&self) -> Option<f64> {
        let counted = self.counted.last().map(|(_, nodes)| *nodes);
        self.ahead.first().map(|first| first.now).or(counted)
    }

    /// Medians, from the newest count on.
    pub(super) fn medians(&self) -> Vec<(f64, f64)> {
        self.counted.last().copied().into_iter().chain(self.ahead.iter().map(|at| (at.day, at.median))).collect()
    }

    /// The ends of the intervals of a level, from the newest count on.
    pub(super) fn band(&self, level: f64) -> Vec<Bar> {
        let start = self.counted.last().map(|(x, nodes)| Bar { x: *x, low: *nodes, high: *nodes });
        let ahead = self.ahead.iter().filter_map(|at| {
            let interval = at.intervals.iter().find(|interval| interval.level.0 == level)?;
            Some(Bar { x: at.day, low: interval.low.0, high: interval.high.0 })
        });
        start.into_iter().chain(ahead).collect()
    }

    /// Levels of the intervals, ascending.
    pub(super) fn levels(&self) -> Vec<f64> {
        self.ahead.first().map(|at| at.intervals.iter().map(|i| i.level.0).collect()).unwrap_or_default()
    }

    /// The days that it has.
    pub(super) fn days(&self) -> impl Iterator<Item = f64> {
        self.counted.iter().map(|(day, _)| *day).chain(self.ahead.iter().map(|at| at.day))
    }

    /// The counts that it has, forecast and interval ends among them.
    pub(super) fn values(&self) -> impl Iterator<Item = f64> {
        let ends = |at: &Ahead| at.intervals.iter().flat_map(|i| [i.low.0, i.high.0]).collect::<Vec<_>>();
        let ahead = self.ahead.iter().flat_map(move |at| ends(at).into_iter().chain([at.median]));
        self.counted.iter().map(|(_, nodes)| *nodes).chain(ahead)
    }
}

/// The thresholds of a forecast's tails and limits, ascending.
pub(super) fn thresholds(answer: &ForecastAnswer) -> Vec<u64> {
    let tails = answer.forecast.iter().flat_map(|at| at.tail.iter().map(|tail| tail.threshold));
    let mut all: Vec<u64> = tails.chain(answer.limits.iter().map(|limit| limit.threshold)).collect();
    all.sort_unstable();
    all.dedup();
    all
}

/// The threshold asked for.
///
/// # Errors
/// When the answer has nothing at it.
pub(super) fn asked(answer: &ForecastAnswer, threshold: u64) -> Result<u64, ChartError> {
    let all = thresholds(answer);
    if all.contains(&threshold) {
        return Ok(threshold);
    }
    let known = all.iter().take(20).map(ToString::to_string).collect::<Vec<_>>().join(", ");
    let detail = format!("the forecast has no tail at {}; choose one of its thresholds: {known}", at_least(threshold));
    Err(ChartError::Absent(detail))
}

/// At most `most` of all, evenly picked, first and last among them.
pub(super) fn picked<T: Copy>(all: &[T], most: usize) -> Vec<T> {
    let last = all.len().saturating_sub(1);
    if all.len() <= most || most < 2 {
        return all.iter().copied().take(most).collect();
    }
    (0..most).filter_map(|i| all.get((i * last + (most - 1) / 2) / (most - 1)).copied()).collect()
}

//! Tails on log axes: observed, fitted, forecast.

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, Frame, Shape, picture};
use super::colours::Colour;
use super::course::{Course, asked, thresholds};
use super::panel::{Bar, Label, Panel, Room};
use super::words::{NAME, at_least, clean, count, day_in_words, hubs, interval, share};
use super::{CAUTION, Chart, ChartError, Theme};
use crate::service::{FitAnswer, ForecastAnswer, TailPointAnswer};

/// A fitted tail is drawn down to a tenth of a node: what lies below says nothing of hubs.
const LEAST_DRAWN: f64 = 0.1;
/// A fit's worst ratio counts where at least so many nodes are left.
const RATIO_NODES: u64 = 10;

const OBSERVED: Colour = Colour::Ink;
const FITTED: Colour = Colour::Series(0);
const FORECAST: Colour = Colour::Series(1);

/// The tail of a forecast at its last date beside that of the newest snapshot.
///
/// # Errors
/// When the answer has no tail, or none at `threshold`.
pub(super) fn forecast_tail(
    answer: &ForecastAnswer,
    threshold: Option<u64>,
    theme: Theme,
) -> Result<Chart, ChartError> {
    let told = threshold.map(|threshold| asked(answer, threshold)).transpose()?;
    let courses: Vec<Course> = thresholds(answer).iter().map(|threshold| Course::of(answer, *threshold)).collect();
    let courses: Vec<Course> = courses.into_iter().filter(|course| !course.ahead.is_empty()).collect();
    let some = |course: &&Course| course.ahead.last().is_some_and(|at| at.median >= 1.0);
    let chosen = courses.iter().find(|course| Some(course.threshold) == told);
    let Some(told) = chosen.or_else(|| courses.iter().rev().find(some)).or(courses.last()) else {
        return Err(ChartError::Absent("the forecast has no tails to show; give thresholds and dates".to_owned()));
    };
    let date = told.ahead.last().map(|at| day_in_words(&at.date)).unwrap_or_default();
    let name = answer.label.as_deref().map(|label| format!("{}. ", clean(label, 2 * NAME))).unwrap_or_default();
    let rows = courses.iter().filter_map(|course| Some(format!("{}: {}.", hubs(course.threshold), words(course)?)));
    let frame = Frame {
        title: format!("Tail on {date}: {} hubs with {}", words(told).unwrap_or_default(), at_least(told.threshold)),
        key: format!("{name}Nodes that have at least so many links; both axes logarithmic."),
        caution: CAUTION.to_owned(),
        description: format!(
            "The tail of the newest snapshot and the forecast for {date}. {}",
            rows.collect::<Vec<_>>().join(" ")
        ),
    };
    let now = |course: &Course| (course.threshold, course.now());
    let observed: Vec<(f64, f64)> = if answer.curve.is_empty() {
        courses.iter().map(now).filter_map(|(degree, nodes)| Some((degree as f64, nodes?))).collect()
    } else {
        answer.curve.iter().map(|point| (point.degree as f64, point.observed as f64)).collect()
    };
    let tail = Tail { observed, fitted: fitted(&answer.curve), forecast: courses };
    picture(theme, frame, |canvas| tail.draw(canvas))
}

/// Observed and fitted tail of a fit.
///
/// # Errors
/// When nothing was fitted.
pub(super) fn fitted_tail(answer: &FitAnswer, theme: Theme) -> Result<Chart, ChartError> {
    if answer.tail.is_empty() {
        let detail = "the mix was given and no law was fitted, so there is no fitted tail to show; leave the mix out";
        return Err(ChartError::Absent(detail.to_owned()));
    }
    let name = answer.label.as_deref().map(|label| format!("{}. ", clean(label, 2 * NAME))).unwrap_or_default();
    let rows = answer.tail.iter().step_by(answer.tail.len().div_ceil(8).max(1)).map(|point| {
        let (degree, fitted) = (at_least(point.degree), count(point.fitted.0));
        format!("{degree}: {} observed, {fitted} fitted.", count(point.observed as f64))
    });
    let frame = Frame {
        title: finding(answer),
        key: format!("{name}Nodes that have at least so many links; both axes logarithmic."),
        caution:
            "A fit describes how links were attracted up to the newest snapshot; nothing obliges the network to go \
                  on that way. Where a failure could harm people, your own engineering practice comes first."
                .to_owned(),
        description: format!("Observed and fitted tail of the newest snapshot. {}", rows.collect::<Vec<_>>().join(" ")),
    };
    let observed = answer.tail.iter().map(|point| (point.degree as f64, point.observed as f64)).collect();
    let tail = Tail { observed, fitted: fitted(&answer.tail), forecast: Vec::new() };
    picture(theme, frame, |canvas| tail.draw(canvas))
}

struct Tail {
    observed: Vec<(f64, f64)>,
    fitted: Vec<(f64, f64)>,
    forecast: Vec<Course>,
}

impl Tail {
    fn draw(&self, canvas: &Canvas) -> Drawn {
        let bars = |course: &Course, widest: bool| {
            let at = course.ahead.last()?;
            let interval = if widest { at.intervals.last() } else { at.intervals.first() };
            interval.map(|i| Bar { x: course.threshold as f64, low: i.low.0, high: i.high.0 })
        };
        let wide: Vec<Bar> = self.forecast.iter().filter_map(|course| bars(course, true)).collect();
        let narrow: Vec<Bar> = (self.forecast.iter())
            .filter(|course| course.levels().len() > 1)
            .filter_map(|course| bars(course, false))
            .collect();
        let medians: Vec<(f64, f64)> = (self.forecast.iter())
            .filter_map(|course| Some((course.threshold as f64, course.ahead.last()?.median)))
            .collect();
        let points = self.observed.iter().chain(&self.fitted).chain(&medians);
        let degrees: Vec<f64> = points.clone().map(|(degree, _)| *degree).collect();
        let ends = wide.iter().flat_map(|bar| [bar.low, bar.high]);
        let nodes: Vec<f64> = points.map(|(_, nodes)| *nodes).chain(ends).collect();
        let across = Axis::log(&degrees, "Links of a node, at least");
        let panel = Panel::new(canvas, across, Axis::log(&nodes, "Nodes"), Room::WHOLE)?;
        panel.line(&self.fitted, FITTED, 2.0, Dash::Long)?;
        panel.markers(&self.observed, 0.0, Shape::Circle, OBSERVED, 3.0)?;
        wide.iter().try_for_each(|bar| panel.bar(*bar, 0.0, FORECAST, false))?;
        narrow.iter().try_for_each(|bar| panel.bar(*bar, 0.0, FORECAST, true))?;
        panel.markers(&medians, 0.0, Shape::Diamond, FORECAST, 4.0)?;
        panel.labels(&self.key())
    }

    /// The key, in the upper right, where a tail leaves room.
    fn key(&self) -> Vec<Label> {
        let levels = self.forecast.first().map(Course::levels).unwrap_or_default();
        let percent = |level: &f64| crate::report::csv::percent(*level);
        let bars = match levels.as_slice() {
            [] => String::new(),
            [one] => format!("; bars: {} % interval", percent(one)),
            [narrow, .., wide] => format!("; bars: {} and {} % intervals", percent(narrow), percent(wide)),
        };
        let entries = [
            (!self.observed.is_empty(), "observed in the newest snapshot".to_owned(), OBSERVED, Shape::Circle),
            (!self.fitted.is_empty(), "fitted law (dashed line)".to_owned(), FITTED, Shape::Square),
            (!self.forecast.is_empty(), format!("forecast median{bars}"), FORECAST, Shape::Diamond),
        ];
        let shown = entries.into_iter().filter(|(there, ..)| *there);
        shown.map(|(_, text, colour, shape)| Label { at: f64::INFINITY, text, mark: Some((colour, shape)) }).collect()
    }
}

/// Points of the fitted line that are worth drawing.
fn fitted(tail: &[TailPointAnswer]) -> Vec<(f64, f64)> {
    let points = tail.iter().map(|point| (point.degree as f64, point.fitted.0));
    points.filter(|(_, nodes)| *nodes >= LEAST_DRAWN).collect()
}

/// "16 (90 % interval 12 to 21), 13 now".
fn words(course: &Course) -> Option<String> {
    let last = course.ahead.last()?;
    let within = last.intervals.last().map(|i| format!(" ({})", interval(i.level.0, i.low.0, i.high.0)));
    Some(format!("{}{}, {} now", count(last.median), within.unwrap_or_default(), count(last.now)))
}

/// How far the fitted tail is off where it can be judged.
fn finding(answer: &FitAnswer) -> String {
    let judged = answer.tail.iter().filter(|point| point.observed >= RATIO_NODES && point.fitted.0 > 0.0);
    let off = |point: &TailPointAnswer| (point.fitted.0 / point.observed as f64 - 1.0).abs();
    match judged.max_by(|a, b| off(a).total_cmp(&off(b))) {
        Some(worst) => format!(
            "The fitted tail is off by {} at most where {RATIO_NODES} nodes or more are left, at {}",
            share(off(worst)),
            at_least(worst.degree)
        ),
        None => format!("Fewer than {RATIO_NODES} nodes have links: too few to judge the fitted tail"),
    }
}

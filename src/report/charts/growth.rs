//! Hubs over time: counted, forecast with intervals, held against limits.

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, Frame, Shape, Side, picture};
use super::colours::{Colour, MOST_SERIES};
use super::course::{Course, asked, picked, thresholds};
use super::panel::{Label, Panel, Room};
use super::words::{NAME, at_least, clean, count, date_at, day_in_words, days, hubs, interval, share, short_day};
use super::{CAUTION, Chart, ChartError, Theme};
use crate::report::csv::percent;
use crate::service::{ForecastAnswer, LimitAnswer};

/// Limits and crossings shown at most.
const MOST_LIMITS: usize = 3;
/// A limit this many times above all else would flatten it, and is told in words alone.
const IN_SIGHT: f64 = 4.0;
/// Markers of past counts, above which a line alone shows them.
const MOST_MARKERS: usize = 40;

/// Hubs over time.
///
/// # Errors
/// When the answer has no tail, or none at `threshold`.
pub(super) fn growth(answer: &ForecastAnswer, threshold: Option<u64>, theme: Theme) -> Result<Chart, ChartError> {
    let shown = match threshold {
        Some(threshold) => vec![asked(answer, threshold)?],
        None => {
            let tails = answer.forecast.first().map(|at| at.tail.iter().map(|tail| tail.threshold).collect::<Vec<_>>());
            picked(&tails.filter(|tails| !tails.is_empty()).unwrap_or_else(|| thresholds(answer)), MOST_SERIES)
        }
    };
    let courses: Vec<Course> = shown.iter().map(|threshold| Course::of(answer, *threshold)).collect();
    let limits: Vec<&LimitAnswer> = answer.limits.iter().filter(|limit| shown.contains(&limit.threshold)).collect();
    if courses.iter().all(|course| course.days().next().is_none()) && limits.is_empty() {
        return Err(ChartError::Absent("the forecast has no tails to show; give thresholds and dates".to_owned()));
    }
    let plot = Plot { label: answer.label.as_deref(), courses: &courses, limits: &limits };
    picture(theme, plot.frame(), |canvas| plot.draw(canvas))
}

struct Plot<'a> {
    label: Option<&'a str>,
    courses: &'a [Course],
    limits: &'a [&'a LimitAnswer],
}

impl Plot<'_> {
    fn alone(&self) -> bool {
        self.courses.len() == 1
    }

    fn frame(&self) -> Frame {
        let levels = self.courses.first().map(Course::levels).unwrap_or_default();
        let levels: Vec<String> = levels.iter().map(|level| percent(*level)).collect();
        let bands = match levels.as_slice() {
            [] => String::new(),
            [one] => format!(" Band: {one} % interval."),
            [narrow, .., wide] if self.alone() => format!(" Bands: {narrow} and {wide} % intervals."),
            [.., wide] => format!(" Bands: {wide} % intervals."),
        };
        let name = self.label.map(|label| format!("{}. ", clean(label, 2 * NAME))).unwrap_or_default();
        Frame {
            title: self.title(),
            key: format!("{name}Markers: counted. Lines beyond the newest snapshot: median forecast.{bands}"),
            caution: CAUTION.to_owned(),
            description: self.description(),
        }
    }

    /// The finding: the limit most at risk, else the largest hubs of which some are foreseen.
    fn title(&self) -> String {
        let risky = self.limits.iter().max_by(|a, b| a.at_by.crossed.0.total_cmp(&b.at_by.crossed.0));
        if let Some(limit) = risky.filter(|_| self.alone()) {
            return limit_in_words(limit);
        }
        let some = |course: &&Course| course.ahead.last().is_some_and(|at| at.median >= 1.0);
        let told = self.courses.iter().rev().find(some).or(self.courses.last());
        told.map(course_in_words).unwrap_or_default()
    }

    fn description(&self) -> String {
        let mut parts = vec!["Hubs over time.".to_owned()];
        for course in self.courses {
            parts.push(format!("{}.", course_in_words(course)));
            let (first, newest) = (course.counted.first(), course.counted.last());
            if let Some(((from, then), (to, now))) = first.zip(newest).filter(|_| course.counted.len() > 1) {
                let (from, to) = (short_day(*from), short_day(*to));
                parts.push(format!("Counted: {} on {from}, {} on {to}.", count(*then), count(*now)));
            }
        }
        parts.extend(self.limits.iter().map(|limit| format!("{}.", limit_in_words(limit))));
        parts.join(" ")
    }

    fn draw(&self, canvas: &Canvas) -> Drawn {
        let panel = Panel::new(canvas, self.dates(), self.counts(), Room::WHOLE)?;
        for (series, course) in self.courses.iter().enumerate() {
            self.draw_course(&panel, series, course)?;
        }
        let newest = self.courses.iter().filter_map(|course| course.counted.last()).map(|(day, _)| *day).next_back();
        if let Some(day) = newest {
            panel.upright(day, "newest snapshot", Dash::Dots)?;
        }
        let mut labels: Vec<Label> =
            self.courses.iter().enumerate().filter_map(|(series, course)| self.label(series, course)).collect();
        for (row, limit) in self.limits.iter().take(MOST_LIMITS).enumerate() {
            self.draw_limit(&panel, row, limit, newest)?;
            labels.extend(self.in_sight(limit).then(|| Label {
                at: limit.max_nodes as f64,
                text: format!("limit {}{}", count(limit.max_nodes as f64), quoted(limit)),
                mark: None,
            }));
        }
        panel.labels(&labels)
    }

    fn draw_course(&self, panel: &Panel, series: usize, course: &Course) -> Drawn {
        let colour = Colour::Series(series);
        let levels = course.levels();
        let shown: Vec<f64> = match levels.as_slice() {
            [narrow, .., wide] if self.alone() => vec![*wide, *narrow],
            all => all.last().copied().into_iter().collect(),
        };
        for level in shown {
            let band = course.band(level);
            match band.as_slice() {
                [only] => panel.bar(*only, 0.0, colour, false)?,
                _ => panel.band(&band, colour, if self.alone() { 0.2 } else { 0.16 })?,
            }
        }
        panel.line(&course.counted, colour, 1.4, Dash::Solid)?;
        panel.line(&course.medians(), colour, 2.2, Dash::Long)?;
        let shape = Shape::of(series);
        if course.counted.len() <= MOST_MARKERS {
            panel.markers(&course.counted, 0.0, shape, colour, 4.0)?;
        }
        let ahead: Vec<(f64, f64)> = course.ahead.iter().map(|at| (at.day, at.median)).collect();
        if ahead.len() <= MOST_MARKERS { panel.markers(&ahead, 0.0, shape, colour, 2.6) } else { Ok(()) }
    }

    /// The limit as a line, when it is crossed, and the date up to which it must hold.
    fn draw_limit(&self, panel: &Panel, row: usize, limit: &LimitAnswer, newest: Option<f64>) -> Drawn {
        let end = self.dates().ends.1;
        if let Some(by) = days(&limit.by).filter(|by| self.alone() && *by <= end) {
            panel.upright_from_foot(by, &format!("by {}", short_day(by)), Dash::Short, row)?;
        }
        if !self.in_sight(limit) {
            return Ok(());
        }
        let at = limit.max_nodes as f64;
        let axis = self.dates();
        panel.line(&[(axis.ends.0, at), (axis.ends.1, at)], Colour::Ink, 1.4, Dash::Short)?;
        let crossings: Vec<(f64, f64)> = (limit.crossing.iter())
            .filter_map(|crossing| Some((days(crossing.date.as_deref()?)?, crossing.probability.0)))
            // One beyond the axis would be drawn at its end, at a wrong date.
            .filter(|(day, _)| *day <= end && newest.is_none_or(|newest| *day >= newest))
            .collect();
        let points: Vec<(f64, f64)> = crossings.iter().map(|(day, _)| (*day, at)).collect();
        panel.line(&points, Colour::Ink, 3.0, Dash::Solid)?;
        panel.markers(&points, 0.0, Shape::Diamond, Colour::Ink, 4.0)?;
        if !self.alone() {
            return Ok(());
        }
        // Three words side by side would run into each other: they step upwards.
        crossings.iter().enumerate().try_for_each(|(i, (day, probability))| {
            let text = format!("crossed by {}: {}", short_day(*day), share(*probability));
            panel.note((*day, at), &text, Side::Right, (-7.0, -12.0 - 17.0 * i as f64))
        })
    }

    fn label(&self, series: usize, course: &Course) -> Option<Label> {
        let at = course.ahead.last().map(|at| at.median).or_else(|| course.now())?;
        let text = if self.alone() { count(at) + " by the last date" } else { at_least(course.threshold) };
        Some(Label { at, text, mark: Some((Colour::Series(series), Shape::of(series))) })
    }

    /// Whether a limit's line fits among the counts.
    fn in_sight(&self, limit: &LimitAnswer) -> bool {
        let values = self.courses.iter().flat_map(Course::values).collect::<Vec<_>>();
        let highest = values.iter().copied().fold(0.0, f64::max);
        values.is_empty() || limit.max_nodes as f64 <= IN_SIGHT * highest.max(1.0)
    }

    fn dates(&self) -> Axis {
        let mut shown: Vec<f64> = self.courses.iter().flat_map(Course::days).collect();
        let last = shown.iter().copied().reduce(f64::max);
        let first = shown.iter().copied().reduce(f64::min);
        if self.alone() || shown.is_empty() {
            let crossings =
                self.limits.iter().flat_map(|limit| limit.crossing.iter().filter_map(|at| at.date.as_deref()));
            let asked = crossings.chain(self.limits.iter().map(|limit| limit.by.as_str())).filter_map(days);
            // A date far beyond all others would squeeze them.
            let far = first.zip(last).map_or(f64::INFINITY, |(first, last)| last + (last - first).max(365.0));
            shown.extend(asked.filter(|day| *day <= far).collect::<Vec<_>>());
        }
        Axis::calendar(&shown, "Date (UTC)")
    }

    fn counts(&self) -> Axis {
        let limits = self.limits.iter().take(MOST_LIMITS).filter(|limit| self.in_sight(limit));
        let values: Vec<f64> =
            self.courses.iter().flat_map(Course::values).chain(limits.map(|limit| limit.max_nodes as f64)).collect();
        match self.courses {
            [course] => Axis::counts(&values, &format!("{} (nodes)", hubs(course.threshold))),
            _ => Axis::log(&values, "Hubs (nodes, logarithmic)"),
        }
    }
}

/// "Hubs with 1,000 links or more: 13 today, 16 by August 2027, 90 % interval 12 to 21".
fn course_in_words(course: &Course) -> String {
    let mut parts: Vec<String> = course.now().map(|now| format!("{} now", count(now))).into_iter().collect();
    if let Some(last) = course.ahead.last() {
        parts.push(format!("{} by {}", count(last.median), date_at(last.day).strftime("%B %Y")));
        parts.extend(last.intervals.last().map(|i| interval(i.level.0, i.low.0, i.high.0)));
    }
    format!("{}: {}", hubs(course.threshold), parts.join(", "))
}

/// When a limit is passed, or how likely that is.
fn limit_in_words(limit: &LimitAnswer) -> String {
    let what = format!("{} {}", count(limit.max_nodes as f64), hubs(limit.threshold).to_lowercase());
    let of = format!("Limit of {what}{}", quoted(limit));
    if limit.headroom.0 < 0.0 {
        return format!("{of}: passed already, {} now", count(limit.now as f64));
    }
    let half = limit.crossing.iter().find(|at| at.probability.0 == 0.5).and_then(|at| at.date.as_deref());
    let by = day_in_words(&limit.by);
    let probability = share(limit.at_by.crossed.0);
    match half {
        Some(date) => format!("{of}: passed by {}, as likely as not; {probability} by {by}", day_in_words(date)),
        None => format!("{of}: passed by {by} with probability {probability}"),
    }
}

fn quoted(limit: &LimitAnswer) -> String {
    limit.name.as_deref().map(|name| format!(" “{}”", clean(name, NAME))).unwrap_or_default()
}

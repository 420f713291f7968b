//! What-ifs beside the forecast as it stands.

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, Frame, Shape, picture};
use super::colours::{Colour, MOST_SERIES};
use super::course::{Course, asked, thresholds};
use super::panel::{Bar, Label, Panel, Room};
use super::words::{NAME, clean, count, day_in_words, days, hubs};
use super::{CAUTION, Chart, ChartError, Theme};
use crate::report::csv::percent;
use crate::service::{ForecastAnswer, ScenarioAnswer};

/// Units between the bars of two what-ifs at one date.
const ASIDE: f64 = 9.0;

/// The tail under every what-if at one threshold: the one asked for, or the highest.
///
/// # Errors
/// When the answer has no what-ifs, or no tail at `threshold`.
pub(super) fn scenarios(answer: &ForecastAnswer, threshold: Option<u64>, theme: Theme) -> Result<Chart, ChartError> {
    if answer.scenarios.is_empty() {
        let detail = "the forecast compares no scenarios; ask about some with it";
        return Err(ChartError::Absent(detail.to_owned()));
    }
    let highest = answer.forecast.iter().flat_map(|at| at.tail.iter().map(|tail| tail.threshold)).max();
    let threshold = match threshold {
        Some(threshold) => asked(answer, threshold)?,
        None => highest.or(thresholds(answer).last().copied()).unwrap_or(1),
    };
    let standing = Course::of(answer, threshold);
    let whatifs: Vec<WhatIf> = answer.scenarios.iter().filter_map(|scenario| WhatIf::of(scenario, threshold)).collect();
    if whatifs.is_empty() {
        let detail = format!("the scenarios have no tail for {}", hubs(threshold).to_lowercase());
        return Err(ChartError::Absent(detail));
    }
    let plot = Plot { name: answer.label.as_deref(), standing, whatifs };
    picture(theme, plot.frame(), |canvas| plot.draw(canvas))
}

struct WhatIf {
    name: String,
    dates: Vec<At>,
}

/// A what-if at a date.
struct At {
    day: f64,
    date: String,
    /// Expected under the what-if and as things stand.
    expected: f64,
    standing: f64,
    /// Level and ends of the widest paired interval of the difference.
    difference: Option<(f64, f64, f64)>,
}

impl WhatIf {
    fn of(scenario: &ScenarioAnswer, threshold: u64) -> Option<Self> {
        let dates = scenario.dates.iter().filter_map(|at| {
            let tail = at.tail.iter().find(|tail| tail.threshold == threshold)?;
            let difference = tail.difference.intervals.last().map(|i| (i.level.0, i.low.0, i.high.0));
            let (expected, standing) = (tail.scenario.0, tail.standing.0);
            Some(At { day: days(&at.date)?, date: at.date.clone(), expected, standing, difference })
        });
        let dates: Vec<At> = dates.collect();
        (!dates.is_empty()).then(|| Self { name: clean(&scenario.name, NAME), dates })
    }

    /// Expected difference at the last date.
    fn effect(&self) -> f64 {
        self.dates.last().map_or(0.0, |at| at.expected - at.standing)
    }

    fn in_words(&self) -> String {
        let Some(last) = self.dates.last() else { return self.name.clone() };
        let within = last.difference.map(|(level, low, high)| {
            format!(", {} % interval of the difference {} to {}", percent(level), signed(low), signed(high))
        });
        let (expected, standing) = (count(last.expected), count(last.standing));
        let date = day_in_words(&last.date);
        format!("{}: {expected} by {date}, {standing} as things stand{}", self.name, within.unwrap_or_default())
    }
}

struct Plot<'a> {
    name: Option<&'a str>,
    standing: Course,
    whatifs: Vec<WhatIf>,
}

impl Plot<'_> {
    fn shown(&self) -> impl Iterator<Item = (usize, &WhatIf)> {
        self.whatifs.iter().take(MOST_SERIES).enumerate()
    }

    fn frame(&self) -> Frame {
        let largest = self.whatifs.iter().max_by(|a, b| a.effect().abs().total_cmp(&b.effect().abs()));
        let name = self.name.map(|label| format!("{}. ", clean(label, 2 * NAME))).unwrap_or_default();
        let level =
            self.whatifs.iter().flat_map(|whatif| &whatif.dates).find_map(|at| at.difference).map(|(level, ..)| level);
        let bars =
            level.map(|level| format!(" Bars: {} % interval of the difference a what-if makes.", percent(level)));
        let more = match self.whatifs.len().saturating_sub(MOST_SERIES) {
            0 => String::new(),
            more => format!(" {more} more in the document."),
        };
        let told: Vec<String> = self.whatifs.iter().map(|whatif| format!("{}.", whatif.in_words())).collect();
        let threshold = self.standing.threshold;
        Frame {
            title: largest.map(|whatif| format!("{}: {}", hubs(threshold), short(whatif))).unwrap_or_default(),
            key: format!("{name}Expected numbers.{}{more}", bars.unwrap_or_default()),
            caution: CAUTION.to_owned(),
            description: format!("{} under what-ifs. {}", hubs(threshold), told.join(" ")),
        }
    }

    fn draw(&self, canvas: &Canvas) -> Drawn {
        let start = self.standing.counted.last().copied();
        let standing = self.standing();
        let bars = |whatif: &WhatIf| {
            let bar = |at: &At| {
                let (_, low, high) = at.difference?;
                Some(Bar { x: at.day, low: (at.standing + low).max(0.0), high: (at.standing + high).max(0.0) })
            };
            whatif.dates.iter().filter_map(bar).collect::<Vec<_>>()
        };
        let lines = |whatif: &WhatIf| {
            start.into_iter().chain(whatif.dates.iter().map(|at| (at.day, at.expected))).collect::<Vec<_>>()
        };
        let points: Vec<(f64, f64)> =
            self.shown().flat_map(|(_, whatif)| lines(whatif)).chain(standing.iter().copied()).collect();
        let ends = self.shown().flat_map(|(_, whatif)| bars(whatif)).flat_map(|bar| [bar.low, bar.high]);
        let values: Vec<f64> = points.iter().map(|(_, nodes)| *nodes).chain(ends).collect();
        let dates: Vec<f64> = points.iter().map(|(day, _)| *day).collect();
        let up = Axis::counts(&values, &format!("{} (nodes)", hubs(self.standing.threshold)));
        let panel = Panel::new(canvas, Axis::calendar(&dates, "Date (UTC)"), up, Room::WHOLE)?;
        let middle = (self.shown().count() as f64 - 1.0) / 2.0;
        for (series, whatif) in self.shown() {
            let (colour, aside) = (Colour::Series(series), ASIDE * (series as f64 - middle));
            bars(whatif).into_iter().try_for_each(|bar| panel.bar(bar, aside, colour, false))?;
            panel.line(
                &lines(whatif),
                colour,
                2.0,
                [Dash::Long, Dash::Short, Dash::Dots].into_iter().cycle().nth(series).unwrap_or(Dash::Long),
            )?;
            let at: Vec<(f64, f64)> = whatif.dates.iter().map(|at| (at.day, at.expected)).collect();
            panel.markers(&at, aside, Shape::of(series), colour, 4.0)?;
        }
        panel.line(&standing, Colour::Ink, 2.2, Dash::Solid)?;
        panel.markers(&standing, 0.0, Shape::Circle, Colour::Ink, 3.0)?;
        let labels = self.shown().filter_map(|(series, whatif)| {
            let last = whatif.dates.last()?;
            let text = format!("{}: {}", whatif.name, count(last.expected));
            Some(Label { at: last.expected, text, mark: Some((Colour::Series(series), Shape::of(series))) })
        });
        let asis = standing.last().map(|(_, nodes)| Label {
            at: *nodes,
            text: format!("as things stand: {}", count(*nodes)),
            mark: Some((Colour::Ink, Shape::Circle)),
        });
        panel.labels(&labels.chain(asis).collect::<Vec<_>>())
    }

    /// Expected numbers as things stand, from the newest count on.
    fn standing(&self) -> Vec<(f64, f64)> {
        let start = self.standing.counted.last().copied();
        let ahead: Vec<(f64, f64)> = self.standing.ahead.iter().map(|at| (at.day, at.expected)).collect();
        let own = self.whatifs.first().map(|whatif| whatif.dates.iter().map(|at| (at.day, at.standing)).collect());
        start.into_iter().chain(if ahead.is_empty() { own.unwrap_or_default() } else { ahead }).collect()
    }
}

fn short(whatif: &WhatIf) -> String {
    let Some(last) = whatif.dates.last() else { return whatif.name.clone() };
    let date = super::words::date_at(last.day).strftime("%B %Y");
    format!("{} by {date} under “{}”, {} as things stand", count(last.expected), whatif.name, count(last.standing))
}

/// A difference with its sign.
fn signed(value: f64) -> String {
    match value {
        v if v < 0.0 => format!("−{}", count(-v)),
        v if v > 0.0 => format!("+{}", count(v)),
        _ => "0".to_owned(),
    }
}

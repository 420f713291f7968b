//! Axes: where a number lies, and which numbers are written beside it.

use super::super::text::figure;
use super::calendar;

/// Ticks that an axis has about.
const TICKS: f64 = 6.0;
/// Numbers farther out are drawn here, so that differences of two stay finite.
const FARTHEST: f64 = 1e300;
/// How far below the smallest positive number zero lies on a log axis, in decades.
const ZERO_BELOW: f64 = 0.5;
/// From here on figures are written as powers of ten.
const LONG: f64 = 1e9;

/// An axis.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Axis {
    /// What it shows, with its unit.
    pub title: String,
    /// Marked numbers and how they are written.
    pub ticks: Vec<(f64, String)>,
    /// Least and greatest place, on the axis's own scale.
    pub ends: (f64, f64),
    scale: Scale,
}

#[derive(Debug, Clone, Copy, PartialEq)]
enum Scale {
    Linear,
    Log,
}

impl Axis {
    /// Counts from zero on; where all lie close together far from zero, their range alone.
    pub(super) fn counts(values: &[f64], title: &str) -> Self {
        let (low, high) = range(values.iter().copied()).unwrap_or((0.0, 1.0));
        let near = low > 0.0 && high - low < 0.4 * high && high >= 20.0;
        let room = if near { (0.1 * (high - low)).max(1e-3 * high).max(1.0) } else { 0.06 * high.abs() };
        let low = if near || low < 0.0 { low - room } else { 0.0 };
        Self::linear((low, (high + room).max(low + 1.0)), 1.0, title)
    }

    /// Positive amounts from zero on.
    pub(super) fn amounts(values: &[f64], title: &str) -> Self {
        let (_, high) = range(values.iter().copied()).unwrap_or((0.0, 1.0));
        let high = if high > 0.0 { high * 1.1 } else { 1.0 };
        Self::linear((0.0, high), 0.0, title)
    }

    /// Whole numbers from the least to the greatest with half a step about them.
    pub(super) fn steps(values: &[f64], title: &str) -> Self {
        let (low, high) = range(values.iter().copied()).unwrap_or((1.0, 1.0));
        Self::linear((low - 0.5, high + 0.5), 1.0, title)
    }

    /// Shares from 0 to 100 %.
    pub(super) fn shares(title: &str) -> Self {
        let ticks = (0..=5).map(|fifth| f64::from(fifth) / 5.0).map(|at| (at, format!("{:.0} %", at * 100.0)));
        Self { title: title.to_owned(), ticks: ticks.collect(), ends: (0.0, 1.03), scale: Scale::Linear }
    }

    /// Dates, given as days since 1970.
    pub(super) fn calendar(days: &[f64], title: &str) -> Self {
        let (low, high) = range(days.iter().copied()).unwrap_or((0.0, 1.0));
        let room = if high > low { 0.03 * (high - low) } else { 15.0 };
        let ends = (low - room, high + room);
        Self { title: title.to_owned(), ticks: calendar::ticks(ends.0, ends.1), ends, scale: Scale::Linear }
    }

    /// Powers of ten; a zero among the values is shown below the least of the others.
    pub(super) fn log(values: &[f64], title: &str) -> Self {
        let positive = values.iter().copied().filter(|value| *value > 0.0);
        let (low, high) = range(positive).unwrap_or((1.0, 1.0));
        let zero = values.iter().any(|value| *value <= 0.0);
        let (low, mut high) = (round_down(low), round_up(high));
        if high < low * 9.0 {
            high = low * 10.0;
        }
        let (from, to) = (low.log10(), high.log10());
        let mut ticks = log_ticks(low, high);
        let foot = if zero { from - ZERO_BELOW } else { from };
        if zero {
            ticks.insert(0, (0.0, "0".to_owned()));
        }
        Self { title: title.to_owned(), ticks, ends: (foot, to), scale: Scale::Log }
    }

    /// Where a number lies, between the axis's ends.
    pub(super) fn place(&self, value: f64) -> f64 {
        let place = match self.scale {
            Scale::Linear => bounded(value),
            Scale::Log if value > 0.0 => bounded(value).log10(),
            Scale::Log => self.ends.0,
        };
        place.clamp(self.ends.0, self.ends.1)
    }

    /// Whether a number lies between the axis's ends.
    pub(super) fn holds(&self, value: f64) -> bool {
        match self.scale {
            Scale::Linear => (self.ends.0..=self.ends.1).contains(&value),
            Scale::Log if value > 0.0 => (self.ends.0 - 1e-9..=self.ends.1 + 1e-9).contains(&value.log10()),
            Scale::Log => self.ticks.first().is_some_and(|(at, _)| *at == 0.0),
        }
    }

    fn linear(ends: (f64, f64), least_step: f64, title: &str) -> Self {
        let (low, high) = ends;
        let raw = (high - low) / TICKS;
        let power = 10_f64.powf(raw.log10().floor());
        let step = [1.0, 2.0, 5.0, 10.0].map(|times| times * power).into_iter().find(|step| *step >= raw);
        let step = step.unwrap_or(raw).max(least_step);
        let first = (low / step).ceil();
        let marks = (0..=2 * TICKS as usize).map(|i| (first + i as f64) * step).take_while(|at| *at <= high);
        let ticks = marks.map(|at| (at, written(at, step))).collect();
        Self { title: title.to_owned(), ticks, ends, scale: Scale::Linear }
    }
}

/// A number on a linear axis, with the decimals that its step needs.
fn written(value: f64, step: f64) -> String {
    if step >= 1.0 || value == 0.0 {
        let sign = if value < 0.0 { "−" } else { "" };
        return format!("{sign}{}", short(value.abs()));
    }
    let decimals = (-step.log10().floor()).clamp(0.0, 12.0) as usize;
    format!("{value:.decimals$}")
}

/// A figure that does not grow long: powers of ten where it would.
fn short(value: f64) -> String {
    if value < LONG {
        return figure(value);
    }
    let power = (value * (1.0 + 1e-12)).log10().floor();
    let times = value / 10_f64.powf(power);
    let raised: String = format!("{power:.0}").chars().map(superscript).collect();
    if (times - 1.0).abs() < 1e-6 { format!("10{raised}") } else { format!("{}×10{raised}", figure(times)) }
}

fn superscript(digit: char) -> char {
    match digit {
        '0' => '⁰',
        '1' => '¹',
        '2' => '²',
        '3' => '³',
        '4' => '⁴',
        '5' => '⁵',
        '6' => '⁶',
        '7' => '⁷',
        '8' => '⁸',
        '9' => '⁹',
        _ => '⁻',
    }
}

/// 1, 2 and 5 times powers of ten while they fit, else the powers alone, as many as can be read.
fn log_ticks(low: f64, high: f64) -> Vec<(f64, String)> {
    let (from, to) = (low.log10().floor() as i32, high.log10().ceil() as i32);
    let decades = (high / low).log10();
    let times: &[f64] = if decades <= 2.4 { &[1.0, 2.0, 5.0] } else { &[1.0] };
    let stride = (decades / 8.0).ceil().max(1.0) as usize;
    let marks = (from..=to).step_by(stride).flat_map(|power| times.iter().map(move |t| t * 10_f64.powi(power)));
    let within = |at: &f64| *at >= low * (1.0 - 1e-9) && *at <= high * (1.0 + 1e-9);
    marks.filter(within).map(|at| (at, short_or_small(at))).collect()
}

fn short_or_small(value: f64) -> String {
    if value >= 0.001 {
        return short(value);
    }
    let power = value.log10().floor();
    let raised: String = format!("{power:.0}").chars().map(superscript).collect();
    let times = (value / 10_f64.powf(power)).round();
    if times == 1.0 { format!("10{raised}") } else { format!("{times}×10{raised}") }
}

/// The largest of 1, 2 and 5 times a power of ten that is not above.
fn round_down(value: f64) -> f64 {
    let power = 10_f64.powf(value.log10().floor());
    let fits = [5.0, 2.0].map(|times| times * power).into_iter().find(|at| *at <= value * (1.0 + 1e-9));
    fits.unwrap_or(power)
}

/// The smallest of 1, 2 and 5 times a power of ten that is not below.
fn round_up(value: f64) -> f64 {
    let power = 10_f64.powf(value.log10().floor());
    let fits = [1.0, 2.0, 5.0].map(|times| times * power).into_iter().find(|at| *at >= value * (1.0 - 1e-9));
    fits.unwrap_or(10.0 * power)
}

fn bounded(value: f64) -> f64 {
    if value.is_nan() { 0.0 } else { value.clamp(-FARTHEST, FARTHEST) }
}

/// Least and greatest.
pub(super) fn range(values: impl Iterator<Item = f64>) -> Option<(f64, f64)> {
    values.map(bounded).fold(None, |ends: Option<(f64, f64)>, value| {
        Some(ends.map_or((value, value), |(low, high)| (low.min(value), high.max(value))))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn texts(axis: &Axis) -> Vec<&str> {
        axis.ticks.iter().map(|(_, text)| text.as_str()).collect()
    }

    #[test]
    fn ticks_are_round_and_grouped() {
        assert_eq!(texts(&Axis::counts(&[3.0, 21.0], "")), ["0", "5", "10", "15", "20"]);
        assert_eq!(texts(&Axis::counts(&[0.0, 1.0], "")), ["0", "1"]);
        assert_eq!(texts(&Axis::log(&[3.0, 4000.0], "")), ["10", "100", "1,000"]);
        assert_eq!(texts(&Axis::log(&[12.0, 70.0], "")), ["10", "20", "50", "100"]);
        assert_eq!(
            texts(&Axis::log(&[0.0, 4.0, 1e15], "")),
            ["0", "10", "1,000", "100,000", "10,000,000", "10⁹", "10¹¹", "10¹³", "10¹⁵"]
        );
        assert_eq!(
            texts(&Axis::amounts(&[0.031], "")),
            ["0.00", "0.01", "0.02", "0.03"].map(|t| if t == "0.00" { "0" } else { t })
        );
    }

    #[test]
    fn zero_lies_at_the_foot_of_a_log_axis() {
        let axis = Axis::log(&[0.0, 1.0, 100.0], "");
        assert!(axis.place(0.0) < axis.place(1.0) && axis.holds(0.0));
        assert!(!Axis::log(&[1.0, 100.0], "").holds(0.0));
    }

    #[test]
    fn no_values_or_hostile_ones_still_make_an_axis() {
        for values in [vec![], vec![0.0], vec![f64::MAX, -f64::MAX], vec![f64::NAN], vec![1e-308, 1e308], vec![7.0]] {
            for axis in [
                Axis::counts(&values, ""),
                Axis::amounts(&values, ""),
                Axis::log(&values, ""),
                Axis::calendar(&values, ""),
                Axis::steps(&values, ""),
            ] {
                assert!(axis.ends.0.is_finite() && axis.ends.1 > axis.ends.0, "{values:?}: {axis:?}");
                assert!(axis.ticks.len() <= 40, "{axis:?}");
            }
        }
    }
}

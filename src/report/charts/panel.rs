//! A panel: two axes and what is drawn between them.

use plotters::coord::CoordTranslate;
use plotters::coord::cartesian::Cartesian2d;
use plotters::coord::types::RangedCoordf64;

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, FINE, Letters, Place, Shape, Side, WIDTH, lines};
use super::colours::Colour;
use super::words::text_width;

/// Height of a line of a label.
const LINE: f64 = 16.0;
/// Gap between a panel and the labels beside it.
const GAP: f64 = 12.0;

/// Where a panel lies.
#[derive(Debug, Clone, Copy)]
pub(super) struct Room {
    pub left: f64,
    pub right: f64,
    pub top: f64,
    pub bottom: f64,
}

impl Room {
    /// A single panel, with labels on its right.
    pub(super) const WHOLE: Self = Self { left: 88.0, right: 730.0, top: 116.0, bottom: 432.0 };
}

/// A panel on its canvas.
pub(super) struct Panel<'c, 'a> {
    canvas: &'c Canvas<'a>,
    x: Axis,
    y: Axis,
    room: Room,
    map: Cartesian2d<RangedCoordf64, RangedCoordf64>,
}

/// A label beside the panel.
pub(super) struct Label {
    /// As high as this value; infinite: at the head, tied to no line.
    pub at: f64,
    pub text: String,
    /// The colour and marker of its line.
    pub mark: Option<(Colour, Shape)>,
}

/// An estimate with its interval, at a place along the axis.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Bar {
    pub x: f64,
    pub low: f64,
    pub high: f64,
}

impl<'c, 'a> Panel<'c, 'a> {
    /// Draws axes, ticks and grid.
    pub(super) fn new(canvas: &'c Canvas<'a>, x: Axis, y: Axis, room: Room) -> Result<Self, super::ChartError> {
        let fine = |units: f64| (units * FINE).round() as i32;
        let across = fine(room.left)..fine(room.right);
        let up = fine(room.bottom)..fine(room.top);
        let map = Cartesian2d::new(x.ends.0..x.ends.1, y.ends.0..y.ends.1, (across, up));
        let panel = Self { canvas, x, y, room, map };
        panel.frame()?;
        Ok(panel)
    }

    /// Where a pair of values lies.
    pub(super) fn place(&self, x: f64, y: f64) -> Place {
        let (across, up) = self.map.translate(&(self.x.place(x), self.y.place(y)));
        (f64::from(across) / FINE, f64::from(up) / FINE)
    }

    /// A line through points.
    pub(super) fn line(&self, points: &[(f64, f64)], colour: Colour, width: f64, dash: Dash) -> Drawn {
        let places: Vec<Place> = points.iter().map(|(x, y)| self.place(*x, *y)).collect();
        self.canvas.line(&places, colour, width, dash)
    }

    /// A band between low and high.
    pub(super) fn band(&self, ends: &[Bar], colour: Colour, opacity: f64) -> Drawn {
        let lows = ends.iter().map(|bar| self.place(bar.x, bar.low));
        let highs = ends.iter().rev().map(|bar| self.place(bar.x, bar.high));
        if ends.len() < 2 {
            return Ok(());
        }
        self.canvas.fill(&lows.chain(highs).collect::<Vec<_>>(), colour, opacity)
    }

    /// An interval as an upright line, `aside` units beside its place, with caps unless it is `thick`.
    pub(super) fn bar(&self, bar: Bar, aside: f64, colour: Colour, thick: bool) -> Drawn {
        let beside = |y: f64| self.place(bar.x, y);
        let ((x, low), (_, high)) = (beside(bar.low), beside(bar.high));
        let x = x + aside;
        let width = if thick { 5.0 } else { 1.6 };
        self.canvas.line(&[(x, low), (x, high)], colour, width, Dash::Solid)?;
        let caps = if thick { Vec::new() } else { vec![low, high] };
        caps.into_iter().try_for_each(|y| self.canvas.line(&[(x - 3.5, y), (x + 3.5, y)], colour, 1.6, Dash::Solid))
    }

    /// Markers at points, `aside` units beside their places.
    pub(super) fn markers(&self, points: &[(f64, f64)], aside: f64, shape: Shape, colour: Colour, size: f64) -> Drawn {
        points.iter().try_for_each(|(x, y)| {
            let (x, y) = self.place(*x, *y);
            self.canvas.marker((x + aside, y), shape, colour, size)
        })
    }

    /// An upright line across the panel with a word at its head, on the side where there is room.
    pub(super) fn upright(&self, x: f64, text: &str, dash: Dash) -> Drawn {
        self.upright_with(x, text, dash, self.room.top + 8.0)
    }

    /// The same with the word at its foot, as many rows above the axis: lines that have notes at their head.
    pub(super) fn upright_from_foot(&self, x: f64, text: &str, dash: Dash, row: usize) -> Drawn {
        self.upright_with(x, text, dash, self.room.bottom - 8.0 - LINE * row as f64)
    }

    fn upright_with(&self, x: f64, text: &str, dash: Dash, y: f64) -> Drawn {
        let (at, _) = self.place(x, 0.0);
        self.canvas.line(&[(at, self.room.top), (at, self.room.bottom)], Colour::Muted, 1.0, dash)?;
        let fits = at + text_width(text, 13.0) + 6.0 < self.room.right;
        let (place, side) = if fits { (at + 5.0, Side::Left) } else { (at - 5.0, Side::Right) };
        self.canvas.text((place, y), text, Letters { size: 13.0, ..Letters::NOTE.at(side) })
    }

    /// A note within the panel, from its left edge at the height of a value.
    pub(super) fn note(&self, (x, y): (f64, f64), text: &str, side: Side, aside: Place) -> Drawn {
        let (across, up) = self.place(x, y);
        let half = text_width(text, 13.0);
        let across = match side {
            Side::Left => (across + aside.0).min(self.room.right - half),
            Side::Right => (across + aside.0).max(self.room.left + half),
            Side::Middle => (across + aside.0).clamp(self.room.left + half / 2.0, self.room.right - half / 2.0),
        };
        self.canvas.text((across, up + aside.1), text, Letters { size: 13.0, ..Letters::LABEL.at(side) })
    }

    /// Labels on the right, moved apart where they would overlap and then tied to their lines.
    pub(super) fn labels(&self, labels: &[Label]) -> Drawn {
        self.labels_within(labels, WIDTH - 8.0)
    }

    /// The same, up to `end`.
    pub(super) fn labels_within(&self, labels: &[Label], end: f64) -> Drawn {
        let x = self.room.right + GAP + 18.0;
        let broken: Vec<Vec<String>> =
            (labels.iter()).map(|label| lines(&label.text, Letters::LABEL.size, end - x, 3)).collect();
        let wanted: Vec<f64> = labels.iter().map(|label| self.place(0.0, label.at).1).collect();
        let heights: Vec<f64> = broken.iter().map(|lines| LINE * lines.len() as f64 + 6.0).collect();
        let settled = apart(&wanted, &heights, self.room.top, self.room.bottom + 30.0);
        for (((label, broken), wanted), middle) in labels.iter().zip(&broken).zip(&wanted).zip(&settled) {
            let (from, to) = ((self.room.right + 2.0, *wanted), (self.room.right + GAP, *middle));
            if let Some((colour, shape)) = label.mark {
                if label.at.is_finite() {
                    self.canvas.line(&[from, to], colour, 1.0, Dash::Solid)?;
                }
                self.canvas.marker((self.room.right + GAP + 7.0, *middle), shape, colour, 4.0)?;
            }
            let first = middle - LINE * (broken.len() as f64 - 1.0) / 2.0;
            for (i, line) in broken.iter().enumerate() {
                self.canvas.text((x, first + LINE * i as f64), line, Letters::LABEL)?;
            }
        }
        Ok(())
    }

    fn frame(&self) -> Drawn {
        let Room { left, right, top, bottom } = self.room;
        for (at, text) in &self.y.ticks {
            let (_, up) = self.place(0.0, *at);
            self.canvas.line(&[(left, up), (right, up)], Colour::Grid, 1.0, Dash::Solid)?;
            self.canvas.text((left - 8.0, up), text, Letters::NOTE.at(Side::Right))?;
        }
        let mut taken = f64::NEG_INFINITY;
        for (at, text) in &self.x.ticks {
            let (across, _) = self.place(*at, 0.0);
            self.canvas.line(&[(across, bottom), (across, bottom + 5.0)], Colour::Muted, 1.0, Dash::Solid)?;
            let half = text_width(text, Letters::NOTE.size) / 2.0;
            // A label that would touch the one before is left out; its mark stands.
            if across - half > taken {
                self.canvas.text((across, bottom + 15.0), text, Letters::NOTE.at(Side::Middle))?;
                taken = across + half + 8.0;
            }
        }
        self.canvas.line(&[(left, bottom), (right, bottom)], Colour::Muted, 1.0, Dash::Solid)?;
        self.canvas.text((left, top - 16.0), &self.y.title, Letters::LABEL)?;
        self.canvas.text(((left + right) / 2.0, bottom + 36.0), &self.x.title, Letters::LABEL.at(Side::Middle))
    }
}

/// Middles as near to those wanted as they can be without overlapping, top to bottom within the ends where there is room.
fn apart(wanted: &[f64], heights: &[f64], top: f64, bottom: f64) -> Vec<f64> {
    let mut order: Vec<(usize, f64, f64)> =
        wanted.iter().zip(heights).enumerate().map(|(i, (at, high))| (i, *at, *high)).collect();
    order.sort_by(|a, b| a.1.total_cmp(&b.1));
    let mut free = top - 8.0;
    for (_, at, high) in &mut order {
        *at = at.max(free + *high / 2.0);
        free = *at + *high / 2.0;
    }
    let mut end = bottom;
    for (_, at, high) in order.iter_mut().rev() {
        *at = at.min(end - *high / 2.0);
        end = *at - *high / 2.0;
    }
    order.sort_by_key(|(i, _, _)| *i);
    order.into_iter().map(|(_, at, _)| at).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_keep_apart_and_near() {
        let heights = [20.0; 4];
        let settled = apart(&[100.0, 101.0, 300.0, 399.0], &heights, 50.0, 400.0);
        assert_eq!(settled, [100.0, 120.0, 300.0, 390.0]);
        assert_eq!(apart(&[399.0, 398.0], &[20.0; 2], 50.0, 400.0), [390.0, 370.0]);
    }
}

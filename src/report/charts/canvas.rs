//! What charts are drawn on: lines, bands, markers and text in units of a picture 960 wide and 540 high.

use std::hash::{DefaultHasher, Hash, Hasher};

use plotters::backend::SVGBackend;
use plotters::coord::Shift;
use plotters::drawing::{DrawingArea, IntoDrawingArea};
use plotters::element::{Circle, DashedPathElement, Drawable, PathElement, PointCollection, Polygon, Rectangle, Text};
use plotters::style::text_anchor::{HPos, Pos, VPos};
use plotters::style::{Color, FontStyle, IntoFont, ShapeStyle};

use super::colours::{Colour, rgb, style};
use super::words::{clean, text_width};
use super::{Chart, ChartError, Theme};
use crate::report::text::wrap;

/// Width of a picture.
pub(super) const WIDTH: f64 = 960.0;
/// Height of a picture.
pub(super) const HEIGHT: f64 = 540.0;
/// Pixels of the drawing library a unit: it rounds to whole ones.
pub(super) const FINE: f64 = 10.0;
/// The library divides sizes of text by this.
const TEXT_FACTOR: f64 = 1.24;
/// Margin on the left and right.
const MARGIN: f64 = 24.0;
const TITLE_SIZE: f64 = 18.0;
const NOTE_SIZE: f64 = 13.5;

/// The outcome of drawing.
pub(super) type Drawn = Result<(), ChartError>;
/// A place, from the upper left.
pub(super) type Place = (f64, f64);

/// How a line is broken, so that lines differ without colour.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Dash {
    Solid,
    Long,
    Short,
    Dots,
}

/// What a marker looks like.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Shape {
    Circle,
    Square,
    Triangle,
    Diamond,
    Cross,
}

impl Shape {
    /// The shape of the n-th line's markers.
    pub(super) fn of(series: usize) -> Self {
        match series % 5 {
            0 => Self::Circle,
            1 => Self::Square,
            2 => Self::Triangle,
            3 => Self::Diamond,
            _ => Self::Cross,
        }
    }
}

/// Where a text stands from its place.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Side {
    Left,
    Middle,
    Right,
}

/// How text looks.
#[derive(Debug, Clone, Copy)]
pub(super) struct Letters {
    pub size: f64,
    pub bold: bool,
    pub colour: Colour,
    /// Which end of the text its place is.
    pub side: Side,
}

impl Letters {
    /// Text beside the matter that starts at its place.
    pub(super) const NOTE: Self = Self { size: NOTE_SIZE, bold: false, colour: Colour::Muted, side: Side::Left };
    /// A label that starts at its place.
    pub(super) const LABEL: Self = Self { size: NOTE_SIZE, bold: false, colour: Colour::Ink, side: Side::Left };

    /// The same, standing on another side of its place.
    pub(super) fn at(self, side: Side) -> Self {
        Self { side, ..self }
    }
}

/// A picture while it is drawn.
pub(super) struct Canvas<'a> {
    area: DrawingArea<SVGBackend<'a>, Shift>,
    theme: Theme,
}

/// What stands around a chart.
pub(super) struct Frame {
    /// The finding.
    pub title: String,
    /// How to read the chart.
    pub key: String,
    /// What to bear in mind, at the foot.
    pub caution: String,
    /// The chart in words.
    pub description: String,
}

/// A chart within its frame.
///
/// # Errors
/// When the drawing library fails.
pub(super) fn picture(theme: Theme, frame: Frame, draw: impl FnOnce(&Canvas) -> Drawn) -> Result<Chart, ChartError> {
    let mut drawn = String::new();
    {
        let size = ((WIDTH * FINE) as u32, (HEIGHT * FINE) as u32);
        let canvas = Canvas { area: SVGBackend::with_string(&mut drawn, size).into_drawing_area(), theme };
        canvas.rectangle((0.0, 0.0), (WIDTH, HEIGHT), Colour::Paper, 1.0)?;
        canvas.surround(&frame)?;
        draw(&canvas)?;
        canvas.area.present().map_err(failed)?;
    }
    let svg = finished(&drawn, &frame, theme)?;
    Ok(Chart { title: frame.title, description: frame.description, svg })
}

impl Canvas<'_> {
    /// A line through places.
    pub(super) fn line(&self, places: &[Place], colour: Colour, width: f64, dash: Dash) -> Drawn {
        if places.len() < 2 {
            return Ok(());
        }
        let points: Vec<_> = places.iter().map(|place| pixel(*place)).collect();
        let style = self.style(colour, 1.0).stroke_width((width * FINE).round() as u32);
        let fine = |units: f64| (units * FINE) as i32;
        match dash {
            Dash::Solid => self.draw(&PathElement::new(points, style)),
            Dash::Long => self.draw(&DashedPathElement::new(points, fine(9.0), fine(5.0), style)),
            Dash::Short => self.draw(&DashedPathElement::new(points, fine(5.0), fine(4.0), style)),
            Dash::Dots => self.draw(&DashedPathElement::new(points, fine(2.0), fine(3.0), style)),
        }
    }

    /// A filled shape.
    pub(super) fn fill(&self, corners: &[Place], colour: Colour, opacity: f64) -> Drawn {
        let corners: Vec<_> = corners.iter().map(|place| pixel(*place)).collect();
        if corners.len() < 3 { Ok(()) } else { self.draw(&Polygon::new(corners, self.style(colour, opacity).filled())) }
    }

    /// A filled rectangle between two corners.
    pub(super) fn rectangle(&self, from: Place, to: Place, colour: Colour, opacity: f64) -> Drawn {
        self.draw(&Rectangle::new([pixel(from), pixel(to)], self.style(colour, opacity).filled()))
    }

    /// A marker about a place; `size` from its middle to its edge.
    pub(super) fn marker(&self, (x, y): Place, shape: Shape, colour: Colour, size: f64) -> Drawn {
        let around =
            |corners: &[Place]| corners.iter().map(|(dx, dy)| (x + dx * size, y + dy * size)).collect::<Vec<Place>>();
        match shape {
            Shape::Circle => {
                let radius = (size * FINE).round() as i32;
                self.draw(&Circle::new(pixel((x, y)), radius, self.style(colour, 1.0).filled()))
            }
            Shape::Square => self.fill(&around(&[(-0.9, -0.9), (0.9, -0.9), (0.9, 0.9), (-0.9, 0.9)]), colour, 1.0),
            Shape::Triangle => self.fill(&around(&[(0.0, -1.15), (1.1, 0.85), (-1.1, 0.85)]), colour, 1.0),
            Shape::Diamond => self.fill(&around(&[(0.0, -1.3), (1.3, 0.0), (0.0, 1.3), (-1.3, 0.0)]), colour, 1.0),
            Shape::Cross => {
                self.line(&around(&[(-1.0, -1.0), (1.0, 1.0)]), colour, 1.6, Dash::Solid)?;
                self.line(&around(&[(-1.0, 1.0), (1.0, -1.0)]), colour, 1.6, Dash::Solid)
            }
        }
    }

    /// Text, its middle as high as its place.
    pub(super) fn text(&self, place: Place, text: &str, letters: Letters) -> Drawn {
        let style = if letters.bold { FontStyle::Bold } else { FontStyle::Normal };
        let anchor = match letters.side {
            Side::Left => HPos::Left,
            Side::Middle => HPos::Center,
            Side::Right => HPos::Right,
        };
        let font = ("sans-serif", letters.size * TEXT_FACTOR * FINE).into_font().style(style);
        let look = font.color(&rgb(letters.colour, self.theme)).pos(Pos::new(anchor, VPos::Center));
        self.draw(&Text::new(text, pixel(place), look))
    }

    /// Title and key at the head, caution at the foot.
    fn surround(&self, frame: &Frame) -> Drawn {
        let room = WIDTH - 2.0 * MARGIN;
        let title = Letters { size: TITLE_SIZE, bold: true, colour: Colour::Ink, side: Side::Left };
        let mut y = 24.0;
        for line in lines(&frame.title, TITLE_SIZE * 1.06, room, 2) {
            self.text((MARGIN, y), &line, title)?;
            y += 22.0;
        }
        for line in lines(&frame.key, NOTE_SIZE, room, 1) {
            self.text((MARGIN, y), &line, Letters::NOTE)?;
        }
        for (line, y) in lines(&frame.caution, NOTE_SIZE, room, 2).iter().zip([505.0, 522.0]) {
            self.text((MARGIN, y), line, Letters::NOTE)?;
        }
        Ok(())
    }

    fn style(&self, colour: Colour, opacity: f64) -> ShapeStyle {
        ShapeStyle::from(rgb(colour, self.theme).mix(opacity))
    }

    fn draw<'e, E>(&self, element: &'e E) -> Drawn
    where
        &'e E: PointCollection<'e, (i32, i32)>,
        for<'b> E: Drawable<SVGBackend<'b>>,
    {
        self.area.draw(element).map_err(failed)
    }
}

/// A text broken to `room` units; what does not fit on `most` lines is cut.
pub(super) fn lines(text: &str, size: f64, room: f64, most: usize) -> Vec<String> {
    let fit = (room / text_width("x", size)) as usize;
    let mut broken = wrap(text, fit, "");
    if broken.len() > most {
        let rest = broken.split_off(most.saturating_sub(1)).join(" ");
        broken.push(clean(&rest, fit.min(rest.chars().count().saturating_sub(1))));
    }
    broken.into_iter().map(|line| clean(&line, fit)).collect()
}

/// The place in the library's pixels, kept within the picture.
fn pixel((x, y): Place) -> (i32, i32) {
    let fine = |value: f64, end: f64| (value.clamp(0.0, end) * FINE).round() as i32;
    (fine(x, WIDTH), fine(y, HEIGHT))
}

/// The library's drawing under a root with its text alternative and the theme's style.
fn finished(drawn: &str, frame: &Frame, theme: Theme) -> Result<String, ChartError> {
    let inner = drawn.split_once('\n').and_then(|(_, rest)| rest.trim_end().strip_suffix("</svg>"));
    let Some(inner) = inner else { return Err(ChartError::Drawing("no picture came of it".to_owned())) };
    // Several charts may stand on one page.
    let mut hasher = DefaultHasher::new();
    (&frame.title, &frame.description).hash(&mut hasher);
    let id = format!("chart-{:016x}", hasher.finish());
    let (wide, high) = (WIDTH * FINE, HEIGHT * FINE);
    Ok(format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"tailcast-chart\" role=\"img\" \
         aria-labelledby=\"{id}-title {id}-desc\" width=\"{WIDTH}\" height=\"{HEIGHT}\" viewBox=\"0 0 {wide} {high}\">\n\
         <title id=\"{id}-title\">{}</title>\n<desc id=\"{id}-desc\">{}</desc>\n{}\n{inner}</svg>\n",
        escaped(&frame.title),
        escaped(&frame.description),
        style(theme),
    ))
}

fn escaped(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;")
}

fn failed(error: impl std::fmt::Display) -> ChartError {
    ChartError::Drawing(error.to_string())
}

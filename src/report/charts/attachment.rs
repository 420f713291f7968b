//! How strongly nodes of each degree attract links.

use super::axis::Axis;
use super::canvas::{Canvas, Dash, Drawn, Frame, Shape, picture};
use super::colours::Colour;
use super::panel::{Bar, Label, Panel, Room};
use super::words::{NAME, clean};
use super::{Chart, ChartError, Theme};
use crate::report::csv::percent;
use crate::report::text::figure;
use crate::service::{AttachmentAnswer, CurvePointAnswer, FitAnswer};

const COUNTED: Colour = Colour::Ink;
const FITTED: Colour = Colour::Series(0);

/// Attraction by degree with its intervals beside that of the fitted mix.
///
/// # Errors
/// When the fit does not stand on link events.
pub(super) fn attachment(answer: &FitAnswer, theme: Theme) -> Result<Chart, ChartError> {
    let Some(found) = answer.attachment.as_ref().filter(|found| !found.curve.is_empty()) else {
        let detail = "only single landings show what nodes of each degree attract; fit a link list";
        return Err(ChartError::Absent(detail.to_owned()));
    };
    let exponent = found.kernel_exponent;
    let within = match (exponent.low, exponent.high, exponent.level) {
        (Some(low), Some(high), Some(level)) => {
            format!(" ({} % interval {:.2} to {:.2})", percent(level.0), low.0, high.0)
        }
        _ => String::new(),
    };
    let level = found.curve.iter().find_map(|point| point.attraction.level);
    let bars = level.map(|level| format!(" Bars: {} % intervals.", percent(level.0))).unwrap_or_default();
    let name = answer.label.as_deref().map(|label| format!("{}. ", clean(label, 2 * NAME))).unwrap_or_default();
    let rows = found.curve.iter().map(|point| {
        let (attraction, fitted) = (figure(point.attraction.estimate.0), figure(point.fitted.0));
        format!("{} links: {attraction}, fitted {fitted}.", degrees(point))
    });
    let frame = Frame {
        title: format!("What a node attracts grows with its links to the power {:.2}{within}", exponent.estimate.0),
        key: format!("{name}{} landings.{bars} Both axes logarithmic.", figure(found.landings as f64)),
        caution:
            "A fit describes how links were attracted up to the newest snapshot; nothing obliges the network to go \
                  on that way. Where a failure could harm people, your own engineering practice comes first."
                .to_owned(),
        description: format!(
            "How often a node draws a link by the links it has, the average node being 1. {}",
            rows.collect::<Vec<_>>().join(" ")
        ),
    };
    picture(theme, frame, |canvas| draw(canvas, found))
}

fn draw(canvas: &Canvas, found: &AttachmentAnswer) -> Drawn {
    let curve = &found.curve;
    let counted: Vec<(f64, f64)> = curve.iter().map(|point| (middle(point), point.attraction.estimate.0)).collect();
    let fitted: Vec<(f64, f64)> = curve.iter().map(|point| (middle(point), point.fitted.0)).collect();
    let bars: Vec<Bar> = (curve.iter())
        .filter_map(|point| {
            let (low, high) = point.attraction.low.zip(point.attraction.high)?;
            Some(Bar { x: middle(point), low: low.0, high: high.0 })
        })
        .collect();
    let degrees: Vec<f64> = counted.iter().map(|(degree, _)| *degree).collect();
    let ends = bars.iter().flat_map(|bar| [bar.low, bar.high]);
    let values: Vec<f64> = counted.iter().chain(&fitted).map(|(_, value)| *value).chain(ends).collect();
    let across = Axis::log(&degrees, "Links a node has");
    let panel = Panel::new(canvas, across, Axis::log(&values, "Attraction (average node = 1)"), Room::WHOLE)?;
    panel.line(&fitted, FITTED, 2.0, Dash::Long)?;
    bars.iter().try_for_each(|bar| panel.bar(*bar, 0.0, COUNTED, false))?;
    panel.markers(&counted, 0.0, Shape::Circle, COUNTED, 3.4)?;
    panel.markers(&fitted, 0.0, Shape::Square, FITTED, 2.2)?;
    let label = |at: Option<&(f64, f64)>, text: &str, mark| {
        at.map(|(_, at)| Label { at: *at, text: text.to_owned(), mark: Some(mark) })
    };
    let labels = [
        label(counted.last(), "counted", (COUNTED, Shape::Circle)),
        label(fitted.last(), "fitted mix", (FITTED, Shape::Square)),
    ];
    panel.labels(&labels.into_iter().flatten().collect::<Vec<_>>())
}

/// Geometric middle of a range of degrees; 0 for nodes without links.
fn middle(point: &CurvePointAnswer) -> f64 {
    (point.lowest as f64 * point.highest as f64).sqrt()
}

fn degrees(point: &CurvePointAnswer) -> String {
    let (lowest, highest) = (figure(point.lowest as f64), figure(point.highest as f64));
    if point.lowest == point.highest { lowest } else { format!("{lowest} to {highest}") }
}

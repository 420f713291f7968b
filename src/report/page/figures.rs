//! Charts within a page.

use super::ReportError;
use crate::report::charts::{Chart, ChartError};

/// A chart within a page.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Figure {
    /// The picture; its marks have ids of their own on the page.
    pub svg: String,
    /// Whether paper, which is short, does without it.
    pub on_screen_only: bool,
}

impl Figure {
    /// The same, left out on paper.
    pub fn on_screen(self) -> Self {
        Self { on_screen_only: true, ..self }
    }
}

/// Charts drawn for a page, those there is nothing for left out.
pub fn figures(charts: Vec<Result<Chart, ChartError>>) -> Result<Vec<Figure>, ReportError> {
    let mut drawn = Vec::new();
    for chart in charts {
        match chart {
            Ok(chart) => drawn.push(Figure { svg: chart.svg, on_screen_only: false }),
            Err(ChartError::Absent(_)) => {}
            Err(error @ ChartError::Drawing(_)) => return Err(ReportError(error.to_string())),
        }
    }
    Ok(drawn)
}

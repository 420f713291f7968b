//! Charts within a page.

use super::ReportError;
use crate::report::charts::{Chart, ChartError};

/// A chart within a page.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Figure {
    /// The picture; its marks have ids of their own on the page.
    pub svg: String,
}

/// Charts drawn for a page, those there is nothing for left out.
pub fn figures(charts: Vec<Result<Chart, ChartError>>) -> Result<Vec<Figure>, ReportError> {
    let mut drawn = Vec::new();
    for chart in charts {
        match chart {
            Ok(chart) => drawn.push(Figure { svg: chart.svg }),
            Err(ChartError::Absent(_)) => {}
            Err(error @ ChartError::Drawing(_)) => return Err(ReportError(error.to_string())),
        }
    }
    Ok(drawn)
}

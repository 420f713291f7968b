//! Costs by degree.

use super::{MAX_BANDS, QuestionFault};
use crate::model::MAX_DEGREE;

/// The largest cost of a node or a link accepted.
const MAX_COST: f64 = 1e12;

/// What a node with so many links costs.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Band {
    /// Fewest links, included.
    pub from: u64,
    /// Most links, included; none: no upper end.
    pub to: Option<u64>,
    /// Cost of a node, in the caller's unit.
    pub per_node: f64,
    /// Cost of each of its links, in the same unit.
    pub per_link: f64,
}

/// Bands in ascending degree that do not overlap; a degree in none of them costs nothing.
#[derive(Debug, Clone, PartialEq)]
pub struct Bands {
    unit: Option<String>,
    bands: Vec<Band>,
}

impl Bands {
    /// Sorts the bands.
    ///
    /// # Errors
    /// Every band that ends before it starts, overlaps another (with the nearest bounds that do not) or has a cost that is negative,
    /// not finite or above 10¹²; an empty or too long list.
    pub fn new(unit: Option<String>, bands: &[Band]) -> Result<Self, Vec<QuestionFault>> {
        let mut faults = Vec::new();
        if bands.is_empty() || bands.len() > MAX_BANDS {
            let detail = format!("{} bands; give between 1 and {MAX_BANDS}", bands.len());
            return Err(vec![QuestionFault::new(None, "", detail)]);
        }
        let mut order: Vec<usize> = (0..bands.len()).collect();
        order.sort_by_key(|&i| bands[i].from);
        for (place, &i) in order.iter().enumerate() {
            let band = &bands[i];
            let mut fault = |field, detail: String| faults.push(QuestionFault::new(Some(i), field, detail));
            if band.from > MAX_DEGREE || band.to.is_some_and(|to| to > MAX_DEGREE) {
                fault("", format!("a degree is at most {MAX_DEGREE}"));
            }
            if let Some(to) = band.to.filter(|&to| to < band.from) {
                fault("to", format!("the band ends at {to}, before it starts at {}", band.from));
            }
            for (field, cost) in [("per_node", band.per_node), ("per_link", band.per_link)] {
                if !(0.0..=MAX_COST).contains(&cost) {
                    fault(field, format!("a cost must lie between 0 and {MAX_COST:e}, not {cost}"));
                }
            }
            let Some(next) = order.get(place + 1).map(|&next| &bands[next]) else { continue };
            if band.to.is_none_or(|to| to >= next.from) {
                let range = |band: &Band| match band.to {
                    Some(to) => format!("{} to {to}", band.from),
                    None => format!("{} and up", band.from),
                };
                let mend = match next.from.checked_sub(1).filter(|&end| end >= band.from) {
                    Some(end) => format!("; end it at {end}"),
                    None => "; leave one of them out".into(),
                };
                fault("to", format!("the band {} overlaps the band {}{mend}", range(band), range(next)));
            }
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        Ok(Self { unit, bands: order.into_iter().map(|i| bands[i]).collect() })
    }

    /// The caller's unit of cost.
    pub fn unit(&self) -> Option<&str> {
        self.unit.as_deref()
    }

    /// The bands, ascending.
    pub fn bands(&self) -> &[Band] {
        &self.bands
    }

    /// What a node of degree `degree` costs.
    pub fn cost(&self, degree: u64) -> f64 {
        let after = self.bands.partition_point(|band| band.from <= degree);
        let band = after.checked_sub(1).map(|i| &self.bands[i]).filter(|band| band.to.is_none_or(|to| degree <= to));
        band.map_or(0.0, |band| band.per_node + band.per_link * degree as f64)
    }
}

//! What-ifs: the forces that a decision would change.

use super::QuestionFault;
use crate::model::{ArrivalPlan, AttachmentMix, GrowthParameters, MAX_DEGREE, ParameterFault};

/// The largest factor on a rate.
const MAX_FACTOR: f64 = 1e6;
/// The largest departure hazard accepted, 1/day.
const MAX_DEPARTURES: f64 = 1e9;

/// What happens to links that would take a node past its cap.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RefusedLinks {
    /// They pick again, by the same mix, among the nodes below the cap.
    Spread,
    /// They are not made.
    Lost,
}

/// No node gains links beyond so many; nodes that have more keep them.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct DegreeCap {
    links: u64,
    refused: RefusedLinks,
}

impl DegreeCap {
    /// A cap at `links`.
    ///
    /// # Errors
    /// A cap of 0, or above 2^53 − 1.
    pub fn new(links: u64, refused: RefusedLinks) -> Result<Self, QuestionFault> {
        if links == 0 || links > MAX_DEGREE {
            let detail = format!("a cap of {links} is not between 1 and {MAX_DEGREE}");
            return Err(QuestionFault::new(None, "links", detail));
        }
        Ok(Self { links, refused })
    }

    /// Most links of a node.
    pub fn links(&self) -> u64 {
        self.links
    }

    /// What happens to the others.
    pub fn refused(&self) -> RefusedLinks {
        self.refused
    }
}

/// A rate in place of the one that holds, or that one times a factor.
#[derive(Debug, Clone, PartialEq)]
pub enum Shift<T> {
    /// In its place.
    To(T),
    /// Times this.
    Factor(f64),
}

/// A what-if: what of the forces would be other than they are.
#[derive(Debug, Clone, PartialEq)]
pub struct Change {
    /// The caller's name for it.
    pub name: String,
    /// Arrivals.
    pub arrivals: Option<Shift<ArrivalPlan>>,
    /// ℓ, link ends landing on present nodes per arrival.
    pub links_per_arrival: Option<Shift<f64>>,
    /// p.
    pub mix: Option<AttachmentMix>,
    /// δ, 1/day.
    pub departures_per_node_day: Option<f64>,
    /// A cap on degrees.
    pub degree_cap: Option<DegreeCap>,
}

impl Change {
    /// No change at all, under a name.
    pub fn none(name: impl Into<String>) -> Self {
        Self {
            name: name.into(),
            arrivals: None,
            links_per_arrival: None,
            mix: None,
            departures_per_node_day: None,
            degree_cap: None,
        }
    }

    /// The part of the change that is of arrivals and links per arrival.
    pub fn of_rates(&self) -> Self {
        Self {
            arrivals: self.arrivals.clone(),
            links_per_arrival: self.links_per_arrival.clone(),
            ..Self::none(self.name.clone())
        }
    }

    /// Whether anything but arrivals and links per arrival is changed.
    pub fn is_of_mechanism(&self) -> bool {
        self.mix.is_some() || self.departures_per_node_day.is_some() || self.degree_cap.is_some()
    }

    /// The forces under the change.
    ///
    /// # Errors
    /// When a rate comes out of range.
    pub fn apply(&self, forces: &GrowthParameters) -> Result<GrowthParameters, ParameterFault> {
        let mut forces = forces.clone();
        forces.arrivals = match &self.arrivals {
            Some(Shift::To(plan)) => plan.clone(),
            Some(Shift::Factor(factor)) => forces.arrivals.scaled(*factor),
            None => forces.arrivals,
        };
        forces.mix = self.mix.unwrap_or(forces.mix);
        forces.degree_cap = self.degree_cap.or(forces.degree_cap);
        let links = match self.links_per_arrival {
            Some(Shift::To(links)) => links,
            Some(Shift::Factor(factor)) => forces.links_per_arrival() * factor,
            None => forces.links_per_arrival(),
        };
        let departures = self.departures_per_node_day.unwrap_or(forces.departure_hazard());
        let losses = forces.link_loss_hazard();
        forces.with_links_per_arrival(links)?.with_losses(departures, losses)
    }

    /// Checks the factors and rates.
    ///
    /// # Errors
    /// A change of nothing; a factor or rate that is negative, not finite or absurdly large.
    pub fn checked(self) -> Result<Self, Vec<QuestionFault>> {
        let mut faults = Vec::new();
        let mut range = |field, value: f64, most: f64| {
            if !(0.0..=most).contains(&value) {
                let detail = format!("{field} must lie between 0 and {most:e}, not {value}");
                faults.push(QuestionFault::new(None, field, detail));
            }
        };
        if let Some(Shift::Factor(factor)) = self.arrivals {
            range("arrivals_factor", factor, MAX_FACTOR);
        }
        match self.links_per_arrival {
            Some(Shift::Factor(factor)) => range("links_factor", factor, MAX_FACTOR),
            Some(Shift::To(links)) => range("links_per_arrival", links, MAX_DEPARTURES),
            None => {}
        }
        if let Some(rate) = self.departures_per_node_day {
            range("departures_per_node_day", rate, MAX_DEPARTURES);
        }
        if self == Self::none(self.name.clone()) {
            let detail = "nothing is changed; give arrivals, arrivals_factor, links_per_arrival, links_factor, \
                          preferential_share, departures_per_node_day or degree_cap";
            faults.push(QuestionFault::new(None, "", detail));
        }
        if faults.is_empty() { Ok(self) } else { Err(faults) }
    }
}

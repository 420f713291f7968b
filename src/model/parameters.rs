//! The forces that move a network's degrees, as rates.

use std::fmt;

use super::{ArrivalPlan, DegreeCap, DegreeKind, EntryDegrees};

/// The largest rate accepted for links per arrival, links per node and day, departures and losses.
const MAX_RATE: f64 = 1e9;
/// The largest share of dormant nodes accepted: with fewer than one node in a hundred active there is no network to speak of.
pub const MAX_DORMANT_SHARE: f64 = 0.99;
/// The largest variance of growth factors accepted: at 6, half of all nodes grow at a hundredth of the mean or slower.
pub const MAX_GROWTH_VARIANCE: f64 = 6.0;
/// The largest kernel exponent accepted; from 2 on, nearly every link ends at one node within a few arrivals (Krapivsky,
/// Redner & Leyvraz 2000).
pub const MAX_KERNEL_EXPONENT: f64 = 2.0;

/// The attachment mix: the share p of landing link ends that pick their node in proportion to its degree; the rest
/// pick uniformly.
///
/// ```
/// use tailcast::model::AttachmentMix;
/// assert!(AttachmentMix::new(0.8).is_some());
/// assert!(AttachmentMix::new(f64::NAN).is_none());
/// ```
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd)]
pub struct AttachmentMix(f64);

impl AttachmentMix {
    /// Every end picks uniformly.
    pub const UNIFORM: Self = Self(0.0);
    /// Every end picks in proportion to degree.
    pub const PREFERENTIAL: Self = Self(1.0);

    /// The mix with preferential share `share`; `None` unless it lies in [0, 1].
    pub fn new(share: f64) -> Option<Self> {
        (0.0..=1.0).contains(&share).then_some(Self(share))
    }

    /// The preferential share p, in [0, 1].
    pub fn preferential_share(self) -> f64 {
        self.0
    }
}

/// Everything that drives the growth of a network's degrees from one date on.
///
/// Gain hazard of a node of degree k: `λ_k = L·[(1−p)/N + p·k/K]` with `L = ℓ·A + ι·N` (mixture form of the linear
/// kernel: Pennock et al. 2002). Nodes depart with hazard δ and link ends are lost with hazard w.
///
/// Three forces are off unless set:
/// - Dormancy: a share d of the present nodes draws no links, and each active node falls dormant with hazard κ per unit of
///   ln N, κ = d/(1−d), so that the share stays d while newcomers arrive active.
/// - Growth variance σ²: each node's hazard is multiplied by a gamma factor η of mean one and variance σ², independent of its
///   degree today; a preferential end picks in proportion to η·k, a uniform one in proportion to η.
/// - Kernel exponent γ: a preferential end picks in proportion to k^γ (Krapivsky, Redner & Leyvraz 2000).
#[derive(Debug, Clone, PartialEq)]
pub struct GrowthParameters {
    /// What a degree counts.
    pub kind: DegreeKind,
    /// Attachment mix p.
    pub mix: AttachmentMix,
    /// Arrival rate A(t), nodes a day.
    pub arrivals: ArrivalPlan,
    /// Distribution of a newcomer's degree.
    pub entry: EntryDegrees,
    /// Cap on the links a node can gain up to, if there is one.
    pub degree_cap: Option<DegreeCap>,
    rates: Rates,
}

#[derive(Debug, Clone, Copy, PartialEq, Default)]
struct Rates {
    links_per_arrival: f64,
    links_per_node_day: f64,
    departures: f64,
    link_losses: f64,
    dormant_share: f64,
    growth_variance: f64,
    /// γ − 1, so that the default is the linear kernel.
    excess_exponent: f64,
}

/// A rate that is negative, not finite or absurdly large.
#[derive(Debug, Clone, PartialEq)]
pub struct ParameterFault {
    /// The rate's name, as callers write it.
    pub field: &'static str,
    /// The value given.
    pub value: f64,
    /// The largest value accepted.
    pub most: f64,
}

impl fmt::Display for ParameterFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Self { field, value, most } = self;
        if *most >= MAX_RATE {
            write!(f, "{field} must lie between 0 and {most:e}, not {value}")
        } else {
            write!(f, "{field} must lie between 0 and {most}, not {value}")
        }
    }
}

impl GrowthParameters {
    /// Parameters of a network that only grows: `links_per_arrival` (ℓ) ends land on present nodes with each arrival.
    ///
    /// # Errors
    /// When ℓ is negative, not finite or absurdly large.
    pub fn new(
        kind: DegreeKind,
        mix: AttachmentMix,
        arrivals: ArrivalPlan,
        entry: EntryDegrees,
        links_per_arrival: f64,
    ) -> Result<Self, ParameterFault> {
        let links_per_arrival = checked("links_per_arrival", links_per_arrival, MAX_RATE)?;
        Ok(Self {
            kind,
            mix,
            arrivals,
            entry,
            degree_cap: None,
            rates: Rates { links_per_arrival, ..Rates::default() },
        })
    }

    /// Adds ι: link ends landing per present node and day, whoever arrives.
    ///
    /// # Errors
    /// When the rate is negative, not finite or absurdly large.
    pub fn with_links_per_node_day(mut self, rate: f64) -> Result<Self, ParameterFault> {
        self.rates.links_per_node_day = checked("links_per_node_day", rate, MAX_RATE)?;
        Ok(self)
    }

    /// Adds δ, the departure hazard of a node (1/day), and w, the loss hazard of a link end (1/day).
    ///
    /// # Errors
    /// When a rate is negative, not finite or absurdly large.
    pub fn with_losses(mut self, departures: f64, link_losses: f64) -> Result<Self, ParameterFault> {
        self.rates.departures = checked("departures_per_node_day", departures, MAX_RATE)?;
        self.rates.link_losses = checked("link_losses_per_link_day", link_losses, MAX_RATE)?;
        Ok(self)
    }

    /// Sets d, the share of present nodes that draw no links.
    ///
    /// # Errors
    /// When the share is not between 0 and 0.99.
    pub fn with_dormant_share(mut self, share: f64) -> Result<Self, ParameterFault> {
        self.rates.dormant_share = checked("dormant_share", share, MAX_DORMANT_SHARE)?;
        Ok(self)
    }

    /// Sets σ², the variance of the nodes' growth factors.
    ///
    /// # Errors
    /// When the variance is not between 0 and 6.
    pub fn with_growth_variance(mut self, variance: f64) -> Result<Self, ParameterFault> {
        self.rates.growth_variance = checked("growth_variance", variance, MAX_GROWTH_VARIANCE)?;
        Ok(self)
    }

    /// Sets γ, the kernel exponent; 1 is the linear kernel.
    ///
    /// # Errors
    /// When the exponent is not between 0 and 2.
    pub fn with_kernel_exponent(mut self, exponent: f64) -> Result<Self, ParameterFault> {
        self.rates.excess_exponent = checked("kernel_exponent", exponent, MAX_KERNEL_EXPONENT)? - 1.0;
        Ok(self)
    }

    /// The same forces with another mix.
    pub fn with_mix(self, mix: AttachmentMix) -> Self {
        Self { mix, ..self }
    }

    /// The same forces with other arrivals.
    pub fn with_arrivals(self, arrivals: ArrivalPlan) -> Self {
        Self { arrivals, ..self }
    }

    /// The same forces with another links-per-arrival.
    ///
    /// # Errors
    /// When ℓ is negative, not finite or absurdly large.
    pub fn with_links_per_arrival(mut self, links_per_arrival: f64) -> Result<Self, ParameterFault> {
        self.rates.links_per_arrival = checked("links_per_arrival", links_per_arrival, MAX_RATE)?;
        Ok(self)
    }

    /// The same forces with a cap on degrees.
    pub fn with_degree_cap(self, degree_cap: Option<DegreeCap>) -> Self {
        Self { degree_cap, ..self }
    }

    /// Whether all nodes grow by one linear kernel: none dormant, none faster than others of its degree.
    pub fn grow_alike(&self) -> bool {
        self.rates.dormant_share == 0.0 && self.rates.growth_variance == 0.0 && self.rates.excess_exponent == 0.0
    }

    /// ℓ, link ends landing on present nodes per arrival.
    pub fn links_per_arrival(&self) -> f64 {
        self.rates.links_per_arrival
    }

    /// ι, link ends landing per present node and day.
    pub fn links_per_node_day(&self) -> f64 {
        self.rates.links_per_node_day
    }

    /// δ, departure hazard of a node, 1/day.
    pub fn departure_hazard(&self) -> f64 {
        self.rates.departures
    }

    /// d, share of present nodes that draw no links.
    pub fn dormant_share(&self) -> f64 {
        self.rates.dormant_share
    }

    /// κ = d/(1−d): hazard per unit of ln N (departures made up for) at which an active node falls dormant.
    pub fn dormancy_hazard(&self) -> f64 {
        self.rates.dormant_share / (1.0 - self.rates.dormant_share)
    }

    /// σ², variance of the nodes' growth factors.
    pub fn growth_variance(&self) -> f64 {
        self.rates.growth_variance
    }

    /// γ, the kernel exponent.
    pub fn kernel_exponent(&self) -> f64 {
        1.0 + self.rates.excess_exponent
    }

    /// w, loss hazard of a link end of its own, 1/day.
    pub fn link_loss_hazard(&self) -> f64 {
        self.rates.link_losses
    }

    /// Hazard that one of a present node's link ends is lost, 1/day: w, and in the total convention also the
    /// departure δ of the node at the other end.
    pub fn end_loss_hazard(&self) -> f64 {
        match self.kind {
            DegreeKind::Received => self.rates.link_losses,
            DegreeKind::Total => self.rates.link_losses + self.rates.departures,
        }
    }

    /// Whether a node's degree can fall or a node can leave.
    pub fn has_losses(&self) -> bool {
        self.rates.departures > 0.0 || self.rates.link_losses > 0.0
    }
}

fn checked(field: &'static str, value: f64, most: f64) -> Result<f64, ParameterFault> {
    if (0.0..=most).contains(&value) { Ok(value) } else { Err(ParameterFault { field, value, most }) }
}

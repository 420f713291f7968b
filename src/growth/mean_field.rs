//! The network's totals over time: nodes N(t) and link ends K(t).

use super::attraction::{Attraction, FACTORS, GrowthFactor, growth_factors};
use super::refusals::Refusals;
use crate::model::{DegreeCounts, GrowthParameters};
use crate::numerics::elementary::exp_m1_ratio;
use crate::numerics::inversion::InversionError;
use crate::numerics::quadrature::PANEL;
use crate::numerics::tolerances::{MESH_HAZARD, MESH_LOG_CHANGE, MESH_MAX_PANELS};

/// Share of the horizon that the first panel takes when there is no link yet and L/K starts from infinity.
const FIRST_PANEL_WITHOUT_LINKS: f64 = 1e-30;

/// Without any link the first ends decide who gains; the law is checked against the master equation up to this share.
const STARTS_UP_TO: f64 = 0.95;
/// After this many mean lifetimes e^{−50} of the nodes or links are left.
const FORGOTTEN_LIFETIMES: f64 = 50.0;
/// Link ends beyond this are nonsense: 2^64 nodes of degree 2^53 have 10³⁵.
const MOST_LINK_ENDS: f64 = 1e40;

/// Why growth cannot be computed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum GrowthError {
    /// (Almost) every landing end must pick in proportion to degree, and no node has a link.
    #[error(
        "no node has a link and more than {STARTS_UP_TO} of the landing ends pick in proportion to links, so the growth law \
         cannot start (at a share of 1 no node ever gains a first link); give a smaller preferential share, entry degrees \
         above 0, or a snapshot with links"
    )]
    NobodyStarts,
    /// The rates are so fast that the time mesh would pass its cap.
    #[error(
        "the rates change the network too fast for the horizon: {MESH_MAX_PANELS} time steps reach day {reached:.3} of \
         {horizon:.3}; check that rates are per day, or ask for nearer dates"
    )]
    TooFast {
        /// Day reached.
        reached: f64,
        /// Day asked for.
        horizon: f64,
    },
    /// The network would outgrow what can be counted.
    #[error(
        "by day {reached:.0} the network would have more than 2^64 nodes or 10^40 link ends; check growth_per_year and the \
         rates, or ask for nearer dates"
    )]
    TooLarge {
        /// Day reached.
        reached: f64,
    },
    /// An ordinary differential equation could not be solved to its tolerance.
    #[error(
        "the growth equations could not be integrated from day {from:.3} to day {to:.3}; check that rates are per day, or ask \
         for nearer dates"
    )]
    Integration {
        /// Where the step began.
        from: f64,
        /// Where it should have ended.
        to: f64,
    },
    /// A cap on nodes that do not grow alike.
    #[error(
        "a degree cap is worked out for nodes that all grow by one linear kernel; ask for it with the model mix, uniform or \
         preferential"
    )]
    CapNeedsAlike,
    /// The caller asked to stop.
    #[error("the growth law was cancelled")]
    Cancelled,
    /// The share of refused links could not be found.
    #[error("the share of links that the degree cap refuses did not settle; ask for nearer dates or a higher cap")]
    CapUnsettled,
    /// A kernel whose nodes have no exact law.
    #[error("this is worked out for the linear kernel; ask for another model than power, or give no kernel_exponent")]
    NoNodeLaw,
    /// A tail probability could not be computed.
    #[error(transparent)]
    Inversion(#[from] InversionError),
}

/// The mean-field course of a network: N(t), K(t) and the hazards they imply, from day 0 to a horizon.
///
/// Formula: `dN/dt = A − δN`, `dK/dt = L + ē·A − θK` with `L = ℓ·A + ι·N`; θ = w + δ for links received, w + 2δ for total
/// degree, where a departing node takes its own ends and its partners' with it.
///
/// # Numerical notes
/// Each panel of the mesh is solved in closed form from its start; only the term that couples ι to N under
/// losses is a 10-point quadrature, exact to rounding because no exponent exceeds 0.7 on a panel.
///
/// ```
/// use tailcast::growth::Course;
/// use tailcast::model::*;
/// let arrivals = ArrivalPlan::constant(10.0).unwrap();
/// let entry = EntryDegrees::single(0);
/// let forces = GrowthParameters::new(DegreeKind::Received, AttachmentMix::new(0.5).unwrap(), arrivals, entry, 3.0).unwrap();
/// let counts = DegreeCounts::from_pairs(&[(0, 60), (5, 40)]).unwrap();
/// let course = Course::new(&counts, forces, 30.0).unwrap();
/// assert!((course.nodes(30.0) - 400.0).abs() < 1e-9);
/// assert!((course.link_ends(30.0) - 1100.0).abs() < 1e-9);
/// ```
#[derive(Debug, Clone)]
pub struct Course {
    parameters: GrowthParameters,
    panels: Vec<Panel>,
    horizon: f64,
    growth_factors: Vec<GrowthFactor>,
    attraction: Attraction,
    refusals: Refusals,
}

/// The state at a panel's start; within it the arrival rate is one exponential.
#[derive(Debug, Clone, Copy)]
struct Panel {
    start: f64,
    nodes: f64,
    link_ends: f64,
    arrival_rate: f64,
    arrival_growth: f64,
}

/// Hazards of one node at a time: gain `uniform + preferential·k`, loss `end_loss·k`.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Hazards {
    /// u = (1−p)·L/N, 1/day.
    pub uniform: f64,
    /// v = p·L/K, 1/(link end · day).
    pub preferential: f64,
    /// u/v = (1−p)·K/(p·N); the kernel's additive constant c. Zero when p = 0, where it is not used.
    pub ratio: f64,
}

impl Course {
    /// The course of a network with `counts` at day 0 under `parameters`, up to day `horizon`.
    ///
    /// # Errors
    /// [`GrowthError::NobodyStarts`], [`GrowthError::TooFast`] and [`GrowthError::TooLarge`].
    pub fn new(counts: &DegreeCounts, parameters: GrowthParameters, horizon: f64) -> Result<Self, GrowthError> {
        let link_ends = counts.link_ends() as f64;
        let lands = parameters.links_per_arrival() > 0.0 || parameters.links_per_node_day() > 0.0;
        let share = parameters.mix.preferential_share();
        if parameters.degree_cap.is_some() && !parameters.grow_alike() {
            return Err(GrowthError::CapNeedsAlike);
        }
        if share > STARTS_UP_TO && lands && link_ends == 0.0 && parameters.entry.mean() == 0.0 {
            return Err(GrowthError::NobodyStarts);
        }
        let growth_factors = growth_factors(parameters.growth_variance(), FACTORS);
        let attraction = Attraction::default();
        let mut course =
            Self { parameters, panels: Vec::new(), horizon, growth_factors, attraction, refusals: Refusals::default() };
        let (mut start, mut nodes, mut link_ends) = (0.0, counts.nodes() as f64, link_ends);
        loop {
            let arrival_rate = course.parameters.arrivals.rate(start);
            let (arrival_growth, edge) = course.segment_after(start);
            let panel = Panel { start, nodes, link_ends, arrival_rate, arrival_growth };
            course.panels.push(panel);
            let end = (start + course.panel_length(&panel)).min(edge).min(horizon);
            if end <= start && start < horizon {
                return Err(GrowthError::TooFast { reached: start, horizon });
            }
            if end >= horizon {
                let (nodes, link_ends) = course.advance(&panel, horizon - start);
                course.check_countable(horizon, nodes, link_ends)?;
                course.attraction = Attraction::along(&course)?;
                course.refusals = Refusals::along(&course, counts)?;
                return Ok(course);
            }
            if course.panels.len() >= MESH_MAX_PANELS {
                return Err(GrowthError::TooFast { reached: end, horizon });
            }
            (nodes, link_ends) = course.advance(&panel, end - start);
            start = end;
            course.check_countable(start, nodes, link_ends)?;
        }
    }

    fn check_countable(&self, reached: f64, nodes: f64, link_ends: f64) -> Result<(), GrowthError> {
        let countable = nodes < u64::MAX as f64 && link_ends < MOST_LINK_ENDS;
        if countable { Ok(()) } else { Err(GrowthError::TooLarge { reached }) }
    }

    /// The forces behind the course.
    pub fn parameters(&self) -> &GrowthParameters {
        &self.parameters
    }

    /// The last day the course reaches.
    pub fn horizon(&self) -> f64 {
        self.horizon
    }

    /// The most links a node can gain up to, if there is a cap.
    pub(crate) fn cap(&self) -> Option<u64> {
        self.parameters.degree_cap.map(|cap| cap.links())
    }

    pub(super) fn with_refusals(self, refusals: Refusals) -> Self {
        Self { refusals, ..self }
    }

    /// Expected number of nodes N(t) at `day`.
    pub fn nodes(&self, day: f64) -> f64 {
        self.totals(day).0
    }

    /// Expected number of link ends K(t) at `day`.
    pub fn link_ends(&self, day: f64) -> f64 {
        self.totals(day).1
    }

    /// Share D = e^{−δ·days} of nodes still present after `days`.
    pub fn survival(&self, days: f64) -> f64 {
        (-self.parameters.departure_hazard() * days).exp()
    }

    /// Hazards of an active node of growth factor `factor` (η). Landing ends share themselves out among active nodes alone:
    /// (1−d)·N of them, with attraction·K link ends weighed by their growth factors.
    pub(crate) fn hazards(&self, day: f64, factor: f64) -> Hazards {
        let (nodes, link_ends) = self.totals(day);
        let p = self.parameters.mix.preferential_share();
        let landing = self.landing(day, nodes) * self.refusals.boost(day);
        let nodes = (nodes * (1.0 - self.parameters.dormant_share())).max(f64::MIN_POSITIVE);
        let attracting = link_ends * self.attraction.at(day);
        Hazards {
            uniform: factor * (1.0 - p) * landing / nodes,
            preferential: if p > 0.0 { factor * p * landing / attracting } else { 0.0 },
            ratio: if p > 0.0 { (1.0 - p) * attracting / (p * nodes) } else { 0.0 },
        }
    }

    /// What a node that loses no link is exposed to over [from, to], where u/v is constant: both hazards are in proportion to it. ∫ L/N, or
    /// for p = 1, where N may not keep pace with K, ∫ L/K but for a factor; none where that has no closed form.
    pub(super) fn exposure(&self, from: f64, to: f64) -> Option<f64> {
        let (parameters, days) = (&self.parameters, to - from);
        let per_node_day = parameters.links_per_node_day();
        if parameters.mix.preferential_share() < 1.0 {
            return Some(parameters.links_per_arrival() * self.arrived_per_node(from, to) + per_node_day * days);
        }
        // K grows by what lands and leaves with its nodes.
        let exposure = (self.link_ends(to) / self.link_ends(from)).ln() + self.degree_loss() * days;
        (per_node_day == 0.0 && exposure.is_finite()).then_some(exposure)
    }

    /// ∫ A/N: what arrives is growth plus replacement.
    fn arrived_per_node(&self, from: f64, to: f64) -> f64 {
        (self.nodes(to) / self.nodes(from)).ln() + self.parameters.departure_hazard() * (to - from)
    }

    /// L = ℓ·A + ι·N, link ends landing on present nodes a day.
    pub(super) fn landing(&self, day: f64, nodes: f64) -> f64 {
        self.parameters.links_per_arrival() * self.parameters.arrivals.rate(day)
            + self.parameters.links_per_node_day() * nodes
    }

    /// The growth factors that stand for the whole distribution, with their shares of the nodes.
    pub(crate) fn growth_factors(&self) -> &[GrowthFactor] {
        &self.growth_factors
    }

    /// Probability that a node active at day `from` is active still at day `to`, given that it stays.
    pub(crate) fn still_active(&self, from: f64, to: f64) -> f64 {
        let kappa = self.parameters.dormancy_hazard();
        if kappa == 0.0 {
            return 1.0;
        }
        (-kappa * self.arrived_per_node(from, to)).exp()
    }

    /// Edges of the mesh within [from, to], both included. Where the course starts without links, the first, vanishing
    /// panel is left out: L/K is infinite at its start.
    pub(crate) fn edges(&self, from: f64, to: f64) -> Vec<f64> {
        let preferential = self.parameters.mix.preferential_share() > 0.0;
        let singular = preferential && from == 0.0 && self.panels.first().is_some_and(|p| p.link_ends == 0.0);
        let first = if singular { self.panels.get(1).map_or(from, |p| p.start) } else { from };
        let mut edges = vec![first];
        let inner = self.panels.partition_point(|p| p.start <= first);
        edges.extend(self.panels[inner..].iter().map(|p| p.start).take_while(|&start| start < to));
        edges.push(to);
        edges
    }

    /// Edges for an integral over arrivals up to `to`. The integrand is smoother than L/K, so where the mesh is graded towards
    /// a start without links, or as fine as the hazards, a few edges serve better: those of the arrival plan, and stretches
    /// that grow away from the start or back from `to`.
    pub(crate) fn arrival_edges(&self, to: f64) -> Vec<f64> {
        let first = self.edges(0.0, to)[0];
        let loss = self.degree_loss();
        let inner: Vec<f64> = if loss > 0.0 {
            [FORGOTTEN_LIFETIMES, 10.0, 3.0, 1.0].map(|lifetimes| to - lifetimes / loss).to_vec()
        } else if first > 0.0 {
            [1e-3, 1e-1].map(|share| to * share).to_vec()
        } else {
            return self.edges(0.0, to);
        };
        let departed = to - FORGOTTEN_LIFETIMES / self.parameters.departure_hazard();
        let from = departed.max(first);
        let mut edges = vec![from, to];
        edges.extend(inner.into_iter().chain(self.parameters.arrivals.segments().iter().map(|s| s.from_day)));
        edges.retain(|&day| day >= from && day <= to);
        edges.sort_by(f64::total_cmp);
        edges.dedup();
        edges
    }

    pub(super) fn totals(&self, day: f64) -> (f64, f64) {
        let after = self.panels.partition_point(|p| p.start <= day);
        let panel = &self.panels[after.saturating_sub(1)];
        let (nodes, link_ends) = self.advance(panel, day - panel.start);
        (nodes, (link_ends - self.refusals.lost_by(day)).max(0.0))
    }

    fn advance(&self, panel: &Panel, days: f64) -> (f64, f64) {
        let (delta, theta) = (self.parameters.departure_hazard(), self.degree_loss());
        let per_arrival = self.parameters.links_per_arrival() + self.parameters.entry.mean();
        let per_node_day = self.parameters.links_per_node_day();
        let (rate, growth) = (panel.arrival_rate, panel.arrival_growth);
        // ∫₀^τ e^{−h(τ−x)}·e^{γx} dx = e^{−hτ}·τ·φ((γ+h)τ), φ(x) = (eˣ−1)/x
        let decayed = |hazard: f64, growth: f64, x: f64| (-hazard * x).exp() * x * exp_m1_ratio((growth + hazard) * x);
        let nodes_after = |x: f64| panel.nodes * (-delta * x).exp() + rate * decayed(delta, growth, x);
        let mut link_ends = panel.link_ends * (-theta * days).exp() + per_arrival * rate * decayed(theta, growth, days);
        if per_node_day > 0.0 {
            let coupled = |x: f64| (-theta * (days - x)).exp() * nodes_after(x);
            link_ends += per_node_day * PANEL.integrate(0.0, days, coupled);
        }
        (nodes_after(days), link_ends)
    }

    /// θ: hazard at which link ends vanish from K, a departing node's own included.
    pub(super) fn degree_loss(&self) -> f64 {
        self.parameters.end_loss_hazard() + self.parameters.departure_hazard()
    }

    /// Exponential growth of the arrival rate at `day`, and where the next segment starts.
    fn segment_after(&self, day: f64) -> (f64, f64) {
        let segments = self.parameters.arrivals.segments();
        let next = segments.partition_point(|s| s.from_day <= day);
        let growth = segments[next.saturating_sub(1)].log_growth();
        (growth, segments.get(next).map_or(f64::INFINITY, |s| s.from_day))
    }

    fn panel_length(&self, panel: &Panel) -> f64 {
        let per_arrival = self.parameters.links_per_arrival() + self.parameters.entry.mean();
        let inflow = per_arrival * panel.arrival_rate + self.parameters.links_per_node_day() * panel.nodes;
        if panel.link_ends == 0.0 && inflow > 0.0 && self.parameters.mix.preferential_share() > 0.0 {
            return self.horizon * FIRST_PANEL_WITHOUT_LINKS;
        }
        let growth = panel.arrival_growth.abs();
        let hazard = growth.max(self.degree_loss()).max(self.parameters.departure_hazard());
        let by_hazard = MESH_HAZARD / hazard;
        // ln N and ln K change by at most MESH_LOG_CHANGE while the net inflow is at most e^0.7 − 1 of the stock.
        let doubling = MESH_LOG_CHANGE.exp_m1();
        let net_nodes = (panel.arrival_rate - self.parameters.departure_hazard() * panel.nodes).abs();
        let net_links = (inflow - self.degree_loss() * panel.link_ends).abs();
        let by_nodes = doubling * panel.nodes / net_nodes;
        let by_links = if panel.link_ends > 0.0 { doubling * panel.link_ends / net_links } else { f64::INFINITY };
        by_hazard.min(by_nodes).min(by_links).max(self.horizon * FIRST_PANEL_WITHOUT_LINKS)
    }
}

//! What the nodes cost, by bands of degree.

use super::OriginError;
use super::prospect::{Prospect, of_growth};
use super::questions::{AmountForecast, BandAmounts, BandsAnswer, BandsAtDate};
use crate::forecast::TailLaw;
use crate::growth::{Course, Holding, Holdings, NetworkLaw, Piece};
use crate::model::{Bands, Change, DegreeCounts, GrowthParameters, Interval, MAX_DEGREE};
use crate::numerics::gamma::gamma_quantile;

/// Costs of `bands` at every date of the forecast under `change`.
///
/// Formula: a band holds `S_from − S_{to+1}` nodes, as forecast, and as many links each as the fitted law says of its nodes. The
/// variance of what they cost is that of chance (each node's cost varies with its degree), plus for each direction in which the
/// forces are uncertain the square of half of what its two ends differ by, plus (model error × cost of what came or left)².
/// Landing ends come ℓ at a time, so their number scatters more than the nodes' own laws, independent of each other, have it: by
/// (1 − 1/ℓ)/arrivals of its square, another direction. Intervals are those of a gamma law with the cost's mean and variance.
///
/// # Errors
/// Cancellation; growth that cannot be computed; a power kernel.
pub(super) fn costs(prospect: &Prospect, bands: &Bands, change: &Change) -> Result<BandsAnswer, OriginError> {
    let pieces: Vec<Piece> = bands
        .bands()
        .iter()
        .map(|band| Piece {
            from: band.from,
            to: band.to.filter(|&to| to < MAX_DEGREE),
            per_node: band.per_node,
            per_link: band.per_link,
        })
        .collect();
    let plan = &prospect.request.plan;
    let mut edges: Vec<u64> = pieces.iter().flat_map(|p| [Some(p.from), p.to.map(|to| to + 1)]).flatten().collect();
    edges.retain(|&edge| edge > 0);
    edges.sort_unstable();
    edges.dedup();
    let tails = match edges.is_empty() {
        true => vec![Vec::new(); plan.days().len()],
        false => prospect.tails(&prospect.plan(&edges, plan.days())?, change)?,
    };
    let horizon = plan.days().last().copied().unwrap_or(0.0);
    let central = prospect.course(change, horizon)?;
    let ends = prospect.ends(change, horizon)?;
    let landing = landing_pair(prospect, change, horizon)?;
    let mut dates = Vec::new();
    for ((&date, &day), tails) in plan.dates().iter().zip(plan.days()).zip(&tails) {
        let held = |course: &Course| -> Result<Holdings, OriginError> {
            prospect.check()?;
            let law = NetworkLaw::at(course, prospect.counts, day).map_err(of_growth)?.until(prospect.cancelled);
            law.holdings(&pieces).map_err(of_growth)
        };
        let own = held(&central)?;
        let ends = ends.iter().map(|(low, high)| Ok((held(low)?, held(high)?)));
        let ends = ends.collect::<Result<Vec<_>, OriginError>>()?;
        let landed = (held(&landing.0)?, held(&landing.1)?);
        let scatter = landing_scatter(central.parameters(), day) / LANDING_STEP;
        let nodes_in = |piece: &Piece| {
            let tail = |edge: u64| tails.iter().find(|law| law.threshold == edge).map(TailLaw::mean);
            let from = if piece.from == 0 { Some(central.nodes(day)) } else { tail(piece.from) };
            let past = piece.to.map_or(Some(0.0), |to| tail(to + 1));
            Some((from? - past?).max(0.0))
        };
        let error = prospect.model_error(day);
        let gone = 1.0 - central.survival(day);
        let mut amounts = Vec::new();
        let (mut total, mut came) = (0.0, 0.0);
        for (i, piece) in pieces.iter().enumerate() {
            let holding = own.pieces.get(i).copied().unwrap_or_default();
            let nodes = nodes_in(piece).unwrap_or(holding.nodes);
            // The forecast's nodes, each with the links that the law gives a node of the band.
            let ratio = if holding.nodes > 0.0 { nodes / holding.nodes } else { 1.0 };
            let links = holding.links * ratio;
            let cost = weigh(piece, nodes, links);
            let beyond: f64 = ends.iter().map(|(low, high)| half_difference(piece, low, high, i).powi(2)).sum();
            let together = scatter * half_difference(piece, &landed.0, &landed.1, i);
            let flow = (cost - standing(prospect.counts, piece)).abs() + gone * cost;
            let variance = holding.variance * ratio + beyond + together.powi(2) + (error * flow).powi(2);
            total += cost;
            came += flow;
            amounts.push(BandAmounts {
                from: piece.from,
                to: piece.to,
                nodes,
                links,
                cost: amount(cost, variance, plan.levels()),
            });
        }
        let of_end = |held: &Holdings| -> f64 { pieces.iter().zip(&held.pieces).map(|(p, h)| weighed(p, h)).sum() };
        let beyond: f64 = ends.iter().map(|(low, high)| (0.5 * (of_end(high) - of_end(low))).powi(2)).sum();
        let together = scatter * 0.5 * (of_end(&landed.1) - of_end(&landed.0));
        let variance = own.variance + beyond + together.powi(2) + (error * came).powi(2);
        dates.push(BandsAtDate { date, total: amount(total, variance, plan.levels()), bands: amounts });
    }
    let largest = dates.iter().enumerate().max_by(|a, b| a.1.total.expected.total_cmp(&b.1.total.expected));
    let peak = largest.map_or(0, |(i, _)| i);
    let now = prospect.counts.iter().map(|(degree, nodes)| nodes as f64 * bands.cost(degree)).sum();
    Ok(BandsAnswer { unit: bands.unit().map(str::to_owned), now, dates, peak })
}

/// Relative step in ℓ by which the effect of more landing ends is measured.
const LANDING_STEP: f64 = 0.01;

/// Courses with a little fewer and a little more links per arrival.
fn landing_pair(prospect: &Prospect, change: &Change, horizon: f64) -> Result<(Course, Course), OriginError> {
    let forces = prospect.forces(change)?;
    let with = |factor: f64| {
        let links = forces.links_per_arrival() * factor;
        let forces = forces.clone().with_links_per_arrival(links).map_err(OriginError::Rate)?;
        Course::new(prospect.counts, forces, horizon).map_err(of_growth)
    };
    Ok((with(1.0 - LANDING_STEP)?, with(1.0 + LANDING_STEP)?))
}

/// Relative standard deviation of the number of landing ends by `day` beyond that of as many independent ones.
fn landing_scatter(forces: &GrowthParameters, day: f64) -> f64 {
    let (links, arrivals) = (forces.links_per_arrival(), forces.arrivals.arrivals_between(0.0, day));
    if links <= 1.0 || arrivals <= 0.0 { 0.0 } else { ((1.0 - links.recip()) / arrivals).sqrt() }
}

fn weigh(piece: &Piece, nodes: f64, links: f64) -> f64 {
    piece.per_node * nodes + piece.per_link * links
}

fn weighed(piece: &Piece, holding: &Holding) -> f64 {
    weigh(piece, holding.nodes, holding.links)
}

fn half_difference(piece: &Piece, low: &Holdings, high: &Holdings, i: usize) -> f64 {
    let cost = |held: &Holdings| held.pieces.get(i).map_or(0.0, |holding| weighed(piece, holding));
    0.5 * (cost(high) - cost(low))
}

/// What today's nodes of the piece cost.
fn standing(counts: &DegreeCounts, piece: &Piece) -> f64 {
    let within = |degree: u64| degree >= piece.from && piece.to.is_none_or(|to| degree <= to);
    let held = counts.iter().filter(|&(degree, _)| within(degree));
    held.map(|(degree, nodes)| weigh(piece, nodes as f64, nodes as f64 * degree as f64)).sum()
}

/// An amount that is never negative, by its mean and variance.
pub(super) fn amount(expected: f64, variance: f64, levels: &[f64]) -> AmountForecast {
    let interval = |&level: &f64| Interval {
        level,
        low: gamma_quantile(expected, variance, 0.5 - 0.5 * level),
        high: gamma_quantile(expected, variance, 0.5 + 0.5 * level),
    };
    AmountForecast { expected, intervals: levels.iter().map(interval).collect() }
}

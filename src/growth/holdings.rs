//! What the nodes of a range of degrees hold: how many they are, how many links they have, and what they weigh.

use super::law::{MixedLaw, NodeLaw};
use super::mean_field::Course;
use crate::model::DegreeCounts;
use crate::numerics::quadrature::PANEL;

/// A range of degrees in which a node weighs `per_node + per_link·k`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Piece {
    /// Fewest links.
    pub from: u64,
    /// Most links; none: no upper end.
    pub to: Option<u64>,
    /// Weight of a node.
    pub per_node: f64,
    /// Weight of each of its links.
    pub per_link: f64,
}

/// What a range of degrees holds at one day.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Holding {
    /// Expected nodes.
    pub nodes: f64,
    /// Expected link ends of these nodes.
    pub links: f64,
    /// Variance of what they weigh, by chance.
    pub variance: f64,
}

/// What ranges of degrees hold.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Holdings {
    /// Range by range.
    pub pieces: Vec<Holding>,
    /// Variance of what all of them weigh together, by chance.
    pub variance: f64,
}

/// Formula: Σ over present nodes and newcomers of the moments of f(X) = per_node + per_link·X within each piece; a present node adds
/// E f² − (E f)² to the variance, newcomers, whose number is Poisson, E f².
///
/// # Numerical notes
/// Node laws by two moments ([`NodeLaw::moments_above`]). Cost: distinct degrees × ends of pieces.
pub(super) fn holdings(
    course: &Course,
    counts: &DegreeCounts,
    day: f64,
    present: &MixedLaw,
    pieces: &[Piece],
) -> Holdings {
    let mut sum = Holdings { pieces: vec![Holding::default(); pieces.len()], variance: 0.0 };
    let gainless = NodeLaw::gainless(course, 0.0, day);
    let survival = course.survival(day);
    for (degree, nodes) in counts.iter() {
        let moments = |threshold| capped(course, present, &gainless, degree, threshold);
        sum.add(pieces, nodes as f64, survival, true, moments);
    }
    let forces = course.parameters();
    for pair in course.arrival_edges(day).windows(2) {
        let length = pair[1] - pair[0];
        for (x, weight) in PANEL.nodes.iter().zip(&PANEL.weights) {
            let arrival = pair[0] + length * x;
            let arrived = weight * length * forces.arrivals.rate(arrival) * course.survival(day - arrival);
            if arrived == 0.0 {
                continue;
            }
            let law = MixedLaw::of_newcomer(course, arrival, day);
            let gainless = NodeLaw::gainless(course, arrival, day);
            for &(degree, share) in forces.entry.shares() {
                let moments = |threshold| capped(course, &law, &gainless, degree, threshold);
                sum.add(pieces, arrived * share, 1.0, false, moments);
            }
        }
    }
    sum
}

/// The moments of a node's degree from a threshold on: a node at the cap or past it gains nothing, any other stops there.
fn capped(course: &Course, law: &MixedLaw, gainless: &NodeLaw, degree: u64, threshold: u64) -> [f64; 3] {
    let Some(cap) = course.cap() else { return law.moments_above(degree, threshold) };
    if degree >= cap {
        return gainless.moments_above(degree, threshold);
    }
    if threshold > cap {
        return [0.0; 3];
    }
    let (from, past) = (law.moments_above(degree, threshold), law.moments_above(degree, cap));
    let at = [1.0, cap as f64, (cap as f64).powi(2)];
    std::array::from_fn(|i| from[i] - past[i] + at[i] * past[0])
}

impl Holdings {
    /// Adds `nodes` nodes, each present with probability `survival`; `counted` when their number is known, else it is Poisson.
    fn add(&mut self, pieces: &[Piece], nodes: f64, survival: f64, counted: bool, moments: impl Fn(u64) -> [f64; 3]) {
        let (mut mean, mut square) = (0.0, 0.0);
        for (piece, holding) in pieces.iter().zip(&mut self.pieces) {
            let from = moments(piece.from);
            if from[0] == 0.0 {
                continue;
            }
            let past = piece.to.map_or([0.0; 3], |to| moments(to + 1));
            let [p, first, second]: [f64; 3] = std::array::from_fn(|i| survival * (from[i] - past[i]).max(0.0));
            let own = piece.per_node * p + piece.per_link * first;
            let own_square = piece.per_node.powi(2) * p
                + 2.0 * piece.per_node * piece.per_link * first
                + piece.per_link.powi(2) * second;
            holding.nodes += nodes * p;
            holding.links += nodes * first;
            holding.variance += nodes * (own_square - if counted { own * own } else { 0.0 }).max(0.0);
            mean += own;
            square += own_square;
        }
        self.variance += nodes * (square - if counted { mean * mean } else { 0.0 }).max(0.0);
    }
}

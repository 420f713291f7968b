//! Simulated histories of networks of mixed kinds, for studies of forecasts: also of such that no attachment law fits.
//!
//! A simulated network grows node by node and link by link outside of the program's own simulator, so that nothing of the fitted model is
//! shared with it. Degrees are links received; nobody leaves.

use jiff::{Timestamp, ToSpan};
use rand::rngs::SmallRng;
use rand::{RngExt, SeedableRng};
use rand_distr::{Distribution, Gamma, Poisson};
use tailcast::model::{DegreeCounts, Snapshot};

/// What makes a simulated network differ from steady growth by one mix.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// Nothing.
    Stationary,
    /// The preferential share moves from its first to its last value.
    DriftingMix,
    /// Links per arrival change up to threefold over the history.
    ChangingLinks,
    /// Nodes fall dormant and draw no more links.
    Dormant,
    /// Some newcomers arrive with many links.
    HeavyEntry,
    /// Nodes differ in how fast they grow.
    GrowthVariance,
    /// Nodes stop drawing links a short while after they arrive.
    Freezing,
    /// Links per arrival grow sixfold.
    SixfoldLinks,
    /// Arrivals all but stop while links go on.
    ArrivalsStop,
}

/// Kinds on which intervals are calibrated.
pub const MIXED: [Kind; 5] =
    [Kind::Stationary, Kind::DriftingMix, Kind::ChangingLinks, Kind::Dormant, Kind::HeavyEntry];
/// Kinds that no attachment law of the program fits, or that break its rates.
pub const HARD: [Kind; 4] = [Kind::GrowthVariance, Kind::Freezing, Kind::SixfoldLinks, Kind::ArrivalsStop];

/// A node that draws links.
struct Node {
    degree: u64,
    /// Period of arrival and place within it, as one number.
    arrived: f64,
    factor: f64,
    active: bool,
}

/// A history of `periods` + 1 snapshots, 90 days apart, drawn from `seed`.
pub fn history(kind: Kind, periods: usize, seed: u64) -> Vec<Snapshot> {
    let mut rng = SmallRng::seed_from_u64(seed);
    let uniform = |rng: &mut SmallRng, low: f64, high: f64| low + (high - low) * rng.random::<f64>();
    let per_period = uniform(&mut rng, 6.5, 8.8).exp();
    let growth = uniform(&mut rng, -0.1, 0.15);
    let wobble = uniform(&mut rng, 0.0, 0.15);
    let links = uniform(&mut rng, 1.5, 6.0);
    let share = (uniform(&mut rng, 0.3, 0.98), uniform(&mut rng, 0.3, 0.98));
    let links_factor = match kind {
        Kind::ChangingLinks => uniform(&mut rng, -1.1, 1.1).exp(),
        Kind::SixfoldLinks => 6.0,
        _ => 1.0,
    };
    let dormancy = if kind == Kind::Dormant { uniform(&mut rng, 0.3, 3.0) } else { 0.0 };
    let life = if kind == Kind::Freezing { uniform(&mut rng, 0.02, 0.15) } else { f64::INFINITY };
    let variance = if kind == Kind::GrowthVariance { uniform(&mut rng, 0.3, 2.0) } else { 0.0 };
    let heavy = uniform(&mut rng, 1.6, 2.6);
    let mut nodes: Vec<Node> = Vec::new();
    // One entry a link end that counts for preferential picks.
    let mut ends: Vec<u32> = Vec::new();
    let mut snapshots = Vec::new();
    let mut as_of: Timestamp = "2020-01-01T00:00:00Z".parse().expect("a date");
    for period in 0..=periods {
        let done = period as f64 / periods as f64;
        let shock = (wobble * (2.0 * rng.random::<f64>() - 1.0) * 1.7).exp();
        let mut mean = per_period * (growth * period as f64).exp() * shock;
        let mut links_now = links * links_factor.powf(done);
        if kind == Kind::ArrivalsStop && period > 2 {
            let slowed = 0.35f64.powi(period as i32 - 2);
            mean *= slowed;
            links_now /= slowed * 1.3f64.powi(period as i32 - 2);
        }
        let p = if kind == Kind::DriftingMix { share.0 + (share.1 - share.0) * done } else { share.0 };
        let arrivals = Poisson::new(mean).map_or(0, |law| law.sample(&mut rng) as u64);
        for i in 0..arrivals {
            let now = period as f64 + i as f64 / arrivals as f64;
            let landing = links_now.floor() as u64 + u64::from(rng.random::<f64>() < links_now.fract());
            for _ in 0..landing {
                land(&mut nodes, &mut ends, p, now - life, &mut rng);
            }
            if dormancy > 0.0 && !nodes.is_empty() {
                // Hazard κ per unit of ln N, the active ones struck alike.
                if rng.random::<f64>() < dormancy {
                    let struck = rng.random_range(0..nodes.len());
                    nodes[struck].active = false;
                }
            }
            let entry = match kind {
                Kind::HeavyEntry => ((1.0 - rng.random::<f64>()).powf(-1.0 / heavy) - 1.0).min(400.0) as u64,
                _ => 0,
            };
            let factor = match variance {
                0.0 => 1.0,
                v => Gamma::new(1.0 / v, v).expect("positive").sample(&mut rng),
            };
            nodes.push(Node { degree: entry, arrived: now, factor, active: true });
            ends.extend(std::iter::repeat_n(nodes.len() as u32 - 1, entry as usize));
        }
        let mut sorted: Vec<u64> = nodes.iter().map(|node| node.degree).collect();
        sorted.sort_unstable();
        let pairs: Vec<(u64, u64)> = sorted.chunk_by(|a, b| a == b).map(|run| (run[0], run.len() as u64)).collect();
        as_of = as_of.checked_add((90 * 24).hours()).expect("within range");
        snapshots.push(Snapshot { as_of, counts: DegreeCounts::from_pairs(&pairs).expect("nodes") });
    }
    snapshots
}

/// One link end lands: in proportion to degree with probability `p`, else uniformly, among nodes that still draw links.
fn land(nodes: &mut [Node], ends: &mut Vec<u32>, p: f64, youngest: f64, rng: &mut SmallRng) {
    const TRIES: usize = 4_000;
    if nodes.is_empty() {
        return;
    }
    let fresh = nodes.partition_point(|node| node.arrived < youngest);
    for _ in 0..TRIES {
        let pick = if !ends.is_empty() && rng.random::<f64>() < p {
            // Ends of frozen nodes are old: look among the newest first.
            let from = if fresh > 0 { ends.len().saturating_sub(20_000) } else { 0 };
            ends[rng.random_range(from..ends.len())] as usize
        } else if fresh < nodes.len() {
            rng.random_range(fresh..nodes.len())
        } else {
            nodes.len() - 1
        };
        let node = &nodes[pick];
        let weight = node.factor / 4.0;
        if node.active && node.arrived >= youngest && (node.factor == 1.0 || rng.random::<f64>() < weight) {
            nodes[pick].degree += 1;
            ends.push(pick as u32);
            return;
        }
    }
}

//! The nodes of a simulated network, and how link ends pick among them.

mod capped;

use rand::RngExt;
use rand::rngs::SmallRng;
use rand_distr::{Distribution, Gamma};

use super::batch::{Batch, Pick};
use crate::growth::power_kernel;
use crate::model::{DegreeCounts, GrowthParameters};
use crate::numerics::sum_tree::SumTree;

/// The nodes present.
pub(super) struct Members {
    /// As many as 32 bits hold: the network's room is checked.
    pub degrees: Vec<u32>,
    /// Degree of each node at the last mark; none for later newcomers, who where links last are not listed at all.
    pub marked: Vec<Option<u64>>,
    /// Degrees at the last mark of nodes that have departed since.
    pub departed: Vec<u64>,
    pub link_ends: u64,
    /// Highest degree of each node since peaks are watched; none when they are not.
    pub peaks: Option<Vec<u64>>,
    /// (Degree at the last mark, highest degree) of nodes that departed since peaks are watched.
    pub departed_peaks: Vec<(u64, u64)>,
    picks: Picks,
}

/// How ends pick.
enum Picks {
    /// All nodes alike but for degree, links never lost: the node at each link end, from which a uniform pick is a pick in
    /// proportion to degree.
    Ends(Vec<u32>),
    /// Every node with a weight of its own.
    Weighed(Box<Weights>),
}

struct Weights {
    exponent: f64,
    factor_law: Option<Gamma<f64>>,
    /// Growth factor of each node; 0 for dormant ones.
    factors: Vec<f64>,
    active: u64,
    /// η of active nodes: uniform ends.
    by_node: SumTree,
    /// η·k^γ of active nodes: preferential ends.
    by_degree: SumTree,
    /// k of all nodes: lost ends.
    by_end: SumTree,
}

impl Members {
    pub fn new(parameters: &GrowthParameters, counts: &DegreeCounts) -> Self {
        let variance = parameters.growth_variance();
        let alike = variance == 0.0 && parameters.dormant_share() == 0.0 && parameters.kernel_exponent() == 1.0;
        let picks = if alike && !parameters.has_losses() {
            Picks::Ends(Vec::with_capacity(counts.link_ends() as usize))
        } else {
            Picks::Weighed(Box::new(Weights {
                exponent: parameters.kernel_exponent(),
                // Shape 1/σ² and scale σ²: mean one. A variance of 0 has no such law, and factors of one.
                factor_law: Gamma::new(variance.recip(), variance).ok(),
                factors: Vec::new(),
                active: 0,
                by_node: SumTree::default(),
                by_degree: SumTree::default(),
                by_end: SumTree::default(),
            }))
        };
        let degrees = Vec::with_capacity(counts.nodes() as usize);
        let (marked, departed, departed_peaks) = (Vec::new(), Vec::new(), Vec::new());
        Self { degrees, marked, departed, link_ends: 0, peaks: None, departed_peaks, picks }
    }

    pub fn join(&mut self, degree: u64, active: bool, rng: &mut SmallRng) {
        let node = self.degrees.len();
        self.degrees.push(degree as u32);
        self.link_ends += degree;
        if let Some(peaks) = &mut self.peaks {
            peaks.push(degree);
        }
        match &mut self.picks {
            Picks::Ends(ends) => ends.extend(std::iter::repeat_n(node as u32, degree as usize)),
            Picks::Weighed(weights) => {
                self.marked.push(None);
                let factor = weights.factor_law.map_or(1.0, |law| law.sample(rng));
                weights.factors.push(if active { factor } else { 0.0 });
                weights.active += u64::from(active);
                weights.weigh(node, degree);
            }
        }
    }

    /// The node at each link end, where ends pick by them.
    pub fn ends(&self) -> Option<&[u32]> {
        match &self.picks {
            Picks::Ends(ends) => Some(ends),
            Picks::Weighed(_) => None,
        }
    }

    /// Makes room for so many more nodes and ends, where ends pick by earlier ones.
    pub fn reserve(&mut self, nodes: usize, ends: usize) {
        if let Picks::Ends(held) = &mut self.picks {
            self.degrees.reserve(nodes);
            held.reserve(ends);
        }
    }

    /// A whole batch arrives, where ends pick by earlier ones.
    pub fn come(&mut self, batch: &mut Batch) {
        if let Picks::Ends(ends) = &mut self.picks {
            batch.come(&mut self.degrees, ends);
            self.link_ends = ends.len() as u64;
        }
    }

    /// Nodes that are not dormant.
    pub fn active_nodes(&self) -> u64 {
        match &self.picks {
            Picks::Ends(_) => self.degrees.len() as u64,
            Picks::Weighed(weights) => weights.active,
        }
    }

    /// Lands `count` ends, a share `share` of them in proportion to degree; all pick from the state before the first.
    pub fn land(&mut self, count: u64, share: f64, rng: &mut SmallRng) {
        match &mut self.picks {
            Picks::Ends(ends) => {
                let (nodes, before) = (self.degrees.len(), ends.len());
                for _ in 0..count {
                    let node = Pick::draw(nodes, before, share, rng).node(ends);
                    self.degrees[node as usize] += 1;
                    self.link_ends += 1;
                    ends.push(node);
                }
            }
            Picks::Weighed(weights) => {
                let picks: Vec<usize> = (0..count)
                    .filter_map(|_| {
                        let preferential = weights.by_degree.total() > 0.0 && rng.random::<f64>() < share;
                        let tree = if preferential { &weights.by_degree } else { &weights.by_node };
                        tree.pick(rng.random::<f64>())
                    })
                    .collect();
                for node in picks {
                    self.degrees[node] += 1;
                    self.link_ends += 1;
                    weights.weigh(node, u64::from(self.degrees[node]));
                    if let Some(peaks) = &mut self.peaks {
                        peaks[node] = peaks[node].max(u64::from(self.degrees[node]));
                    }
                }
            }
        }
    }

    /// Highest degree of `node` since peaks are watched. Where links last that is its degree today.
    pub fn peak(&self, node: usize) -> u64 {
        let watched = match self.picks {
            Picks::Ends(_) => None,
            Picks::Weighed(_) => self.peaks.as_ref(),
        };
        watched.map_or(u64::from(self.degrees[node]), |peaks| peaks[node])
    }

    /// An active node, any of them alike, falls dormant.
    pub fn put_to_sleep(&mut self, rng: &mut SmallRng) {
        let Picks::Weighed(weights) = &mut self.picks else { return };
        if weights.active == 0 {
            return;
        }
        // Active nodes are a good share of all, so trying at random soon finds one.
        let node = loop {
            let node = rng.random_range(0..self.degrees.len());
            if weights.factors[node] > 0.0 {
                break node;
            }
        };
        weights.factors[node] = 0.0;
        weights.active -= 1;
        weights.weigh(node, u64::from(self.degrees[node]));
    }

    /// A node, any of them alike, departs with its ends.
    pub fn depart(&mut self, rng: &mut SmallRng) {
        let Picks::Weighed(weights) = &mut self.picks else { return };
        if self.degrees.is_empty() {
            return;
        }
        let node = rng.random_range(0..self.degrees.len());
        let last = self.degrees.len() - 1;
        self.link_ends -= u64::from(self.degrees.swap_remove(node));
        let before = self.marked.swap_remove(node);
        self.departed.extend(before);
        if let Some(peaks) = &mut self.peaks {
            let peak = peaks.swap_remove(node);
            self.departed_peaks.extend(before.map(|before| (before, peak)));
        }
        weights.active -= u64::from(weights.factors.swap_remove(node) > 0.0);
        for tree in [&mut weights.by_node, &mut weights.by_degree, &mut weights.by_end] {
            tree.set(last, 0.0);
        }
        if node < last {
            weights.weigh(node, u64::from(self.degrees[node]));
        }
    }

    /// A link end, any of them alike, is lost.
    pub fn lose_end(&mut self, rng: &mut SmallRng) {
        let Picks::Weighed(weights) = &mut self.picks else { return };
        if let Some(node) = weights.by_end.pick(rng.random::<f64>()) {
            self.degrees[node] -= 1;
            self.link_ends -= 1;
            weights.weigh(node, u64::from(self.degrees[node]));
        }
    }
}

impl Weights {
    fn weigh(&mut self, node: usize, degree: u64) {
        let (factor, k) = (self.factors[node], degree as f64);
        self.by_node.set(node, factor);
        self.by_degree.set(node, factor * power_kernel(k, self.exponent));
        self.by_end.set(node, k);
    }
}

//! Landing where degrees are capped.

use rand::RngExt;
use rand::rngs::SmallRng;

use super::{Members, Picks};
use crate::growth::power_kernel;
use crate::model::{DegreeCap, RefusedLinks};
use crate::numerics::tolerances::CAP_MAX_PICKS;

impl Members {
    /// Lands up to `count` ends, as [`Self::land`], on nodes below the cap. All pick from the state before the first, but a
    /// node that is full by then gains no more.
    pub fn land_capped(&mut self, count: u64, share: f64, cap: DegreeCap, rng: &mut SmallRng) {
        let mut landed = Vec::new();
        for _ in 0..count {
            let node = self.pick(share, rng).and_then(|node| match cap.refused() {
                _ if u64::from(self.degrees[node]) < cap.links() => Some(node),
                RefusedLinks::Lost => None,
                RefusedLinks::Spread => self.pick_below(share, cap.links(), rng),
            });
            // Only the degree is raised yet, not what picks go by.
            if let Some(node) = node {
                self.degrees[node] += 1;
                self.link_ends += 1;
                landed.push(node);
            }
        }
        for node in landed {
            match &mut self.picks {
                Picks::Ends(ends) => ends.push(node as u32),
                Picks::Weighed(weights) => weights.weigh(node, u64::from(self.degrees[node])),
            }
            if let Some(peaks) = &mut self.peaks {
                peaks[node] = peaks[node].max(u64::from(self.degrees[node]));
            }
        }
    }

    /// A node by the attachment mix; none when nobody draws links.
    fn pick(&self, share: f64, rng: &mut SmallRng) -> Option<usize> {
        match &self.picks {
            Picks::Ends(ends) => {
                if self.degrees.is_empty() {
                    return None;
                }
                let preferential = !ends.is_empty() && rng.random::<f64>() < share;
                Some(match preferential {
                    true => ends[rng.random_range(0..ends.len())] as usize,
                    false => rng.random_range(0..self.degrees.len()),
                })
            }
            Picks::Weighed(weights) => {
                let preferential = weights.by_degree.total() > 0.0 && rng.random::<f64>() < share;
                let tree = if preferential { &weights.by_degree } else { &weights.by_node };
                tree.pick(rng.random::<f64>())
            }
        }
    }

    /// A node below `cap` by the mix. Picking again soon finds one unless nearly all that draw links are full; then one is
    /// picked among the others, each with its chance under the mix.
    fn pick_below(&self, share: f64, cap: u64, rng: &mut SmallRng) -> Option<usize> {
        for _ in 0..CAP_MAX_PICKS {
            let node = self.pick(share, rng)?;
            if u64::from(self.degrees[node]) < cap {
                return Some(node);
            }
        }
        let (by_node, by_degree) = match &self.picks {
            Picks::Ends(ends) => (self.degrees.len() as f64, ends.len() as f64),
            Picks::Weighed(weights) => (weights.by_node.total(), weights.by_degree.total()),
        };
        let preferential = if by_degree > 0.0 { share / by_degree } else { 0.0 };
        let uniform = if by_degree > 0.0 { (1.0 - share) / by_node } else { by_node.recip() };
        let chance = |node: usize| -> f64 {
            let k = f64::from(self.degrees[node]);
            let (factor, kernel) = match &self.picks {
                Picks::Ends(_) => (1.0, k),
                Picks::Weighed(weights) => (weights.factors[node], power_kernel(k, weights.exponent)),
            };
            factor * (uniform + preferential * kernel)
        };
        let open = || (0..self.degrees.len()).filter(|&node| u64::from(self.degrees[node]) < cap && chance(node) > 0.0);
        let mut left = rng.random::<f64>() * open().map(chance).sum::<f64>();
        let found = open().find(|&node| {
            left -= chance(node);
            left < 0.0
        });
        found.or_else(|| open().next_back())
    }
}

//! Exact event-by-event simulation of the same network, seeded.

use rand::rngs::SmallRng;
use rand::{RngExt, SeedableRng};
use rand_distr::{Distribution, Poisson};

use crate::model::{DegreeCounts, GrowthParameters};

/// Most nodes and most link ends a simulation holds in memory: node indices are 32-bit.
const MAX_HELD: u64 = 1 << 31;

/// Why a network cannot be simulated event by event.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SimulationError {
    /// It would not fit in memory.
    #[error("a simulation holds at most {MAX_HELD} nodes and link ends; this network has {held}")]
    TooLarge {
        /// Nodes or link ends asked for.
        held: u128,
    },
    /// Losses are not simulated.
    #[error("departures and link losses are not simulated")]
    Losses,
}

/// A growing network, event by event: nodes arrive as a Poisson process at the planned rate, and with each arrival ℓ link
/// ends land on nodes already present (a fractional ℓ lands its whole part and one more with the fraction's
/// probability); further ends land at rate ι per present node. Each end picks its node by the attachment mix.
///
/// While no node has a link, an end that would pick in proportion to degree picks uniformly.
///
/// ```
/// use tailcast::growth::Simulation;
/// use tailcast::model::*;
/// let forces = GrowthParameters::new(
///     DegreeKind::Received, AttachmentMix::new(0.8).unwrap(), ArrivalPlan::constant(50.0).unwrap(),
///     EntryDegrees::single(0), 3.0,
/// ).unwrap();
/// let start = DegreeCounts::from_pairs(&[(0, 10), (1, 5)]).unwrap();
/// let mut network = Simulation::new(&start, forces, 7).unwrap();
/// network.run_until(100.0).unwrap();
/// let counts = network.degree_counts();
/// assert_eq!(counts.link_ends(), 5 + 3 * u128::from(counts.nodes() - 15));
/// ```
pub struct Simulation {
    parameters: GrowthParameters,
    degrees: Vec<u64>,
    /// The node at each link end: a uniform pick from it is a pick in proportion to degree.
    ends: Vec<u32>,
    day: f64,
    rng: SmallRng,
}

impl Simulation {
    /// A network with `counts` at day 0, grown under `parameters` with random numbers from `seed`.
    ///
    /// # Errors
    /// When the network would not fit in memory, or loses nodes or links.
    pub fn new(counts: &DegreeCounts, parameters: GrowthParameters, seed: u64) -> Result<Self, SimulationError> {
        let held = u128::from(counts.nodes()).max(counts.link_ends());
        if held > u128::from(MAX_HELD) {
            return Err(SimulationError::TooLarge { held });
        }
        if parameters.has_losses() {
            return Err(SimulationError::Losses);
        }
        let mut network = Self {
            parameters,
            degrees: Vec::with_capacity(counts.nodes() as usize),
            ends: Vec::with_capacity(counts.link_ends() as usize),
            day: 0.0,
            rng: SmallRng::seed_from_u64(seed),
        };
        for (degree, nodes) in counts.iter() {
            for _ in 0..nodes {
                network.add_node(degree);
            }
        }
        Ok(network)
    }

    /// Today's degree counts.
    pub fn degree_counts(&self) -> DegreeCounts {
        let mut sorted = self.degrees.clone();
        sorted.sort_unstable();
        let pairs: Vec<(u64, u64)> = sorted.chunk_by(|a, b| a == b).map(|run| (run[0], run.len() as u64)).collect();
        // A simulation starts from a network with at least one node, and never loses one: the pairs are sound.
        DegreeCounts::from_pairs(&pairs).unwrap_or_else(|_| unreachable!("a simulated network has nodes"))
    }

    /// Grows the network to `day`; does nothing when that is past.
    ///
    /// # Errors
    /// When the network outgrows memory.
    pub fn run_until(&mut self, day: f64) -> Result<(), SimulationError> {
        // The cumulative arrivals of a Poisson process are exponential steps of mean one: walk them on that clock.
        let planned = self.parameters.arrivals.arrivals_between(self.day, day);
        let arrivals = draw_poisson(planned, &mut self.rng);
        let per_node = self.parameters.links_per_node_day();
        if per_node == 0.0 {
            for _ in 0..arrivals {
                self.arrive()?;
            }
        } else {
            let mut times: Vec<f64> = (0..arrivals).map(|_| self.draw_arrival_time(day)).collect();
            times.sort_by(f64::total_cmp);
            for time in times {
                self.land_between(self.day, time)?;
                self.arrive()?;
                self.day = time;
            }
            self.land_between(self.day, day)?;
        }
        self.day = self.day.max(day);
        Ok(())
    }

    /// Grows the network by exactly `arrivals` nodes, whatever the plan's rate.
    ///
    /// # Errors
    /// When the network outgrows memory.
    pub fn arrive_many(&mut self, arrivals: u64) -> Result<(), SimulationError> {
        (0..arrivals).try_for_each(|_| self.arrive())
    }

    /// One arrival: its landing ends pick among the nodes present, in the state before the arrival; then it joins.
    fn arrive(&mut self) -> Result<(), SimulationError> {
        let mean = self.parameters.links_per_arrival();
        let landing = mean.floor() as u64 + u64::from(self.rng.random::<f64>() < mean.fract());
        self.land(landing)?;
        let entry = self.draw_entry();
        self.check_room(entry)?;
        self.add_node(entry);
        Ok(())
    }

    /// Lands `count` ends at once: all pick from the state before the first of them.
    fn land(&mut self, count: u64) -> Result<(), SimulationError> {
        self.check_room(count)?;
        let (nodes, ends) = (self.degrees.len(), self.ends.len());
        let share = self.parameters.mix.preferential_share();
        for _ in 0..count {
            let preferential = ends > 0 && self.rng.random::<f64>() < share;
            let node = match preferential {
                true => self.ends[self.rng.random_range(0..ends)],
                false => self.rng.random_range(0..nodes) as u32,
            };
            self.degrees[node as usize] += 1;
            self.ends.push(node);
        }
        Ok(())
    }

    /// Ends that land at rate ι per node between two arrivals, one by one.
    fn land_between(&mut self, from: f64, to: f64) -> Result<(), SimulationError> {
        let mean = self.parameters.links_per_node_day() * self.degrees.len() as f64 * (to - from);
        let count = draw_poisson(mean, &mut self.rng);
        (0..count).try_for_each(|_| self.land(1))
    }

    fn add_node(&mut self, degree: u64) {
        let node = self.degrees.len() as u32;
        self.degrees.push(degree);
        self.ends.extend(std::iter::repeat_n(node, degree as usize));
    }

    fn draw_entry(&mut self) -> u64 {
        let shares = self.parameters.entry.shares();
        if let [(degree, _)] = shares {
            return *degree;
        }
        let mut left: f64 = self.rng.random();
        for &(degree, share) in shares {
            left -= share;
            if left < 0.0 {
                return degree;
            }
        }
        shares.last().map_or(0, |&(degree, _)| degree)
    }

    /// A time between today and `until` with density in proportion to the arrival rate, by rejection.
    fn draw_arrival_time(&mut self, until: f64) -> f64 {
        let arrivals = &self.parameters.arrivals;
        let edges = arrivals.segments().iter().map(|s| s.from_day).filter(|&d| d > self.day && d < until);
        // Each segment is monotone, so its rate is largest at one of its ends.
        let ceiling = edges
            .flat_map(|d| [arrivals.rate(d), arrivals.rate(d.next_down())])
            .fold(arrivals.rate(self.day).max(arrivals.rate(until.next_down())), f64::max);
        loop {
            let time = self.day + (until - self.day) * self.rng.random::<f64>();
            if self.rng.random::<f64>() * ceiling < arrivals.rate(time) {
                return time;
            }
        }
    }

    fn check_room(&self, more: u64) -> Result<(), SimulationError> {
        let held = u128::from(more) + self.ends.len().max(self.degrees.len()) as u128;
        if held > u128::from(MAX_HELD) { Err(SimulationError::TooLarge { held }) } else { Ok(()) }
    }
}

fn draw_poisson(mean: f64, rng: &mut SmallRng) -> u64 {
    // `Poisson::new` refuses a mean of 0, which is a certain 0.
    Poisson::new(mean).map_or(0, |law| law.sample(rng) as u64)
}

//! Exact event-by-event simulation of the same network, seeded.

mod batch;
mod members;
mod streams;

use rand::rngs::SmallRng;
use rand::{RngExt, SeedableRng};
use rand_distr::{Distribution, Poisson};

use batch::{BATCH, Batch, Pick};
use members::Members;
use streams::{Part, Streams};

use crate::model::{CountsFault, DegreeCap, DegreeCounts, GrowthParameters, Move};
use crate::numerics::roots::increasing_root;

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
}

/// A growing network, event by event: nodes arrive as a Poisson process at the planned rate, and with each arrival ℓ link
/// ends land on nodes already present (a fractional ℓ lands its whole part and one more with the fraction's
/// probability); further ends land at rate ι per present node. Each end picks its node by the attachment mix among the active
/// nodes. Nodes depart and ends are lost one by one, in continuous time; with each arrival every active node falls dormant
/// with probability κ/N. A node's growth factor is drawn when it arrives, or when the simulation starts.
///
/// While no active node has a link, an end that would pick in proportion to degree picks uniformly; while none is active, ends
/// land nowhere.
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
/// let counts = network.degree_counts().unwrap();
/// assert_eq!(counts.link_ends(), 5 + 3 * u128::from(counts.nodes() - 15));
/// ```
pub struct Simulation {
    parameters: GrowthParameters,
    members: Members,
    day: f64,
    rng: SmallRng,
    cap: Option<DegreeCap>,
    /// Streams of random numbers for each arrival, where the network is one of a pair.
    streams: Option<Streams>,
}

impl Simulation {
    /// A network with `counts` at day 0, grown under `parameters` with random numbers from `seed`.
    ///
    /// # Errors
    /// When the network would not fit in memory.
    pub fn new(counts: &DegreeCounts, parameters: GrowthParameters, seed: u64) -> Result<Self, SimulationError> {
        let held = u128::from(counts.nodes()).max(counts.link_ends());
        if held > u128::from(MAX_HELD) {
            return Err(SimulationError::TooLarge { held });
        }
        let members = Members::new(&parameters, counts);
        let rng = SmallRng::seed_from_u64(seed);
        let cap = parameters.degree_cap;
        let mut network = Self { parameters, members, day: 0.0, rng, cap, streams: None };
        let dormant = network.parameters.dormant_share();
        for (degree, nodes) in counts.iter() {
            for _ in 0..nodes {
                let active = dormant == 0.0 || network.rng.random::<f64>() >= dormant;
                network.members.join(degree, active, &mut network.rng);
            }
        }
        network.mark();
        Ok(network)
    }

    /// One of a pair: every arrival, and what lands with it, draws from a stream of its own that `seed` and the arrival's
    /// number alone decide (common random numbers), so that two networks of equal seeds and slightly different forces
    /// differ by their forces and little else. Arrivals are the same where the plans are.
    ///
    /// The pairing is exact only while nothing happens between arrivals; under departures, lost links or links that land per
    /// node and day, what happens between two arrivals draws on the stream of the first, and networks drift apart within
    /// that stretch.
    ///
    /// # Errors
    /// When the network would not fit in memory.
    pub fn paired(counts: &DegreeCounts, parameters: GrowthParameters, seed: u64) -> Result<Self, SimulationError> {
        let mut network = Self::new(counts, parameters, seed)?;
        network.streams = Some(Streams::new(seed));
        Ok(network)
    }

    /// From now on no node gains links beyond the cap; nodes that have more keep them, and a newcomer's own links are not
    /// cut. An end picks its node as without a cap. Where that node is full the end is lost, or picks again by the same
    /// mix until it finds one that is not; it is lost too when every node that the mix could pick is full.
    pub fn with_cap(mut self, cap: DegreeCap) -> Self {
        self.cap = Some(cap);
        self
    }

    /// Today's degree counts.
    ///
    /// # Errors
    /// When every node has departed.
    pub fn degree_counts(&self) -> Result<DegreeCounts, Vec<CountsFault>> {
        /// Degrees below this are counted in place; the others are few, and sorted.
        const COUNTED: usize = 1 << 12;
        let (mut counted, mut large) = (vec![0; COUNTED], Vec::new());
        for &degree in &self.members.degrees {
            match counted.get_mut(degree as usize) {
                Some(nodes) => *nodes += 1,
                None => large.push(degree),
            }
        }
        large.sort_unstable();
        let counted = (0..).zip(counted).filter(|&(_, nodes)| nodes > 0);
        let large = large.chunk_by(|a, b| a == b).map(|run| (u64::from(run[0]), run.len() as u64));
        DegreeCounts::from_pairs(&counted.chain(large).collect::<Vec<_>>())
    }

    /// Nodes with at least `threshold` links today.
    pub fn tail_size(&self, threshold: u64) -> u64 {
        self.members.degrees.iter().filter(|&&degree| u64::from(degree) >= threshold).count() as u64
    }

    /// Remembers every node's degree of today, for [`Self::moves`].
    pub fn mark(&mut self) {
        self.members.marked = self.members.degrees.iter().map(|&degree| Some(degree.into())).collect();
        self.members.departed.clear();
    }

    /// How many nodes went from which degree at the last mark (the start, when there was none) to which today.
    pub fn moves(&self) -> Vec<Move> {
        let marked = self.members.marked.iter().copied().chain(std::iter::repeat(None));
        let present = marked.zip(&self.members.degrees).map(|(before, &after)| (before, Some(u64::from(after))));
        let departed = self.members.departed.iter().map(|&before| (Some(before), None));
        let mut sorted: Vec<_> = present.chain(departed).collect();
        sorted.sort_unstable();
        let runs = sorted.chunk_by(|a, b| a == b);
        runs.map(|run| Move { before: run[0].0, after: run[0].1, nodes: run.len() as u64 }).collect()
    }

    /// Watches the highest degree of every node from today on, for [`Self::peaks`]; marks too.
    pub fn watch_peaks(&mut self) {
        self.mark();
        self.members.peaks = Some(self.members.degrees.iter().map(|&degree| degree.into()).collect());
        self.members.departed_peaks.clear();
    }

    /// (Degree when peaks began to be watched, highest degree since) of every node that was present then, those that
    /// departed since included. Without [`Self::watch_peaks`], degrees of today stand for the highest.
    pub fn peaks(&self) -> Vec<(u64, u64)> {
        let present = self.members.marked.iter().enumerate();
        let present = present.filter_map(|(node, &before)| Some((before?, self.members.peak(node))));
        present.chain(self.members.departed_peaks.iter().copied()).collect()
    }

    /// Grows the network to `day`; does nothing when that is past.
    ///
    /// # Errors
    /// When the network outgrows memory.
    pub fn run_until(&mut self, day: f64) -> Result<(), SimulationError> {
        if self.streams.is_some() {
            return self.run_paired(day);
        }
        let planned = self.parameters.arrivals.arrivals_between(self.day, day);
        let arrivals = draw_poisson(planned, &mut self.rng);
        if self.quiet_between_arrivals() {
            self.arrive_many(arrivals)?;
        } else {
            let mut times: Vec<f64> = (0..arrivals).map(|_| self.draw_arrival_time(day)).collect();
            times.sort_by(f64::total_cmp);
            for time in times {
                self.pass_until(time)?;
                self.arrive()?;
            }
            self.pass_until(day)?;
        }
        self.day = self.day.max(day);
        Ok(())
    }

    /// The cumulative arrivals of a Poisson process are exponential steps of mean one: arrivals walk on that clock, each by
    /// a step of its own, whatever the plan.
    fn run_paired(&mut self, day: f64) -> Result<(), SimulationError> {
        let quiet = self.quiet_between_arrivals();
        while let Some(due) = self.streams.as_ref().map(Streams::next_arrival) {
            let plan = &self.parameters.arrivals;
            if due > plan.arrivals_between(0.0, day) {
                break;
            }
            if !quiet {
                let passed = |day: f64| plan.arrivals_between(0.0, day) - due;
                let time = increasing_root(self.day, day, f64::EPSILON * day, passed);
                self.pass_until(time)?;
            }
            self.arrive()?;
        }
        if !quiet {
            self.pass_until(day)?;
        }
        self.day = self.day.max(day);
        Ok(())
    }

    /// Grows the network by exactly `arrivals` nodes, whatever the plan's rate.
    ///
    /// # Errors
    /// When the network outgrows memory.
    pub fn arrive_many(&mut self, arrivals: u64) -> Result<(), SimulationError> {
        if self.streams.is_some() || self.cap.is_some() || self.members.ends().is_none() {
            return (0..arrivals).try_for_each(|_| self.arrive());
        }
        // Room for what is expected, but never for more than fits.
        let expected = arrivals as f64 * (self.parameters.links_per_arrival() + self.parameters.entry.mean());
        self.members.reserve(arrivals.min(MAX_HELD) as usize, expected.min(MAX_HELD as f64) as usize);
        let (mut batch, mut left) = (Batch::default(), arrivals);
        while left > 0 {
            let drawn = (0..left.min(BATCH)).try_fold((), |(), _| self.draw_into(&mut batch));
            left -= left.min(BATCH);
            self.members.come(&mut batch);
            drawn?;
        }
        Ok(())
    }

    /// The draws of [`Self::arrive`] for the arrival after those of `batch`, in the same order.
    fn draw_into(&mut self, batch: &mut Batch) -> Result<(), SimulationError> {
        let drawn: u64 = batch.arrivals.iter().map(|(landing, entry)| landing + entry).sum();
        let (nodes, ends) = (self.members.degrees.len() + batch.arrivals.len(), self.members.link_ends + drawn);
        let landing = self.draw_landing();
        check_held(landing, nodes, ends)?;
        let share = self.parameters.mix.preferential_share();
        let before = batch.picks.len();
        batch.picks.extend((0..landing).map(|_| Pick::draw(nodes, ends as usize, share, &mut self.rng)));
        let entry = self.draw_entry();
        check_held(entry, nodes, ends + landing).inspect_err(|_| batch.picks.truncate(before))?;
        batch.arrivals.push((landing, entry));
        Ok(())
    }

    fn draw_landing(&mut self) -> u64 {
        let mean = self.parameters.links_per_arrival();
        mean.floor() as u64 + u64::from(self.rng.random::<f64>() < mean.fract())
    }

    /// One arrival: its landing ends pick among the nodes present, in the state before the arrival; then it joins.
    fn arrive(&mut self) -> Result<(), SimulationError> {
        if let Some(streams) = &mut self.streams {
            streams.count_arrival();
        }
        self.draw_from(Part::Landing);
        let landing = self.draw_landing();
        self.land(landing)?;
        self.draw_from(Part::Joining);
        let entry = self.draw_entry();
        self.check_room(entry)?;
        let kappa = self.parameters.dormancy_hazard();
        if kappa > 0.0 {
            let active = self.members.active_nodes() as f64 / self.members.degrees.len() as f64;
            for _ in 0..draw_poisson(kappa * active, &mut self.rng) {
                self.members.put_to_sleep(&mut self.rng);
            }
        }
        self.members.join(entry, true, &mut self.rng);
        Ok(())
    }

    /// Turns to the stream of a part of the arrival in hand, where the network is one of a pair.
    fn draw_from(&mut self, part: Part) {
        if let Some(streams) = &self.streams {
            self.rng = streams.of(part);
        }
    }

    /// Lands `count` ends at once: all pick from the state before the first of them.
    fn land(&mut self, count: u64) -> Result<(), SimulationError> {
        self.check_room(count)?;
        let share = self.parameters.mix.preferential_share();
        match self.cap {
            None => self.members.land(count, share, &mut self.rng),
            Some(cap) => self.members.land_capped(count, share, cap, &mut self.rng),
        }
        Ok(())
    }

    /// Whether nothing happens but arrivals and what lands with them.
    fn quiet_between_arrivals(&self) -> bool {
        self.parameters.links_per_node_day() == 0.0 && !self.parameters.has_losses()
    }

    /// Departures, lost ends and ends that land at rate ι per node, one by one until `time`, with exponential waiting times
    /// (Gillespie 1977).
    fn pass_until(&mut self, time: f64) -> Result<(), SimulationError> {
        let (per_node, departure, loss) = (
            self.parameters.links_per_node_day(),
            self.parameters.departure_hazard(),
            self.parameters.end_loss_hazard(),
        );
        loop {
            let (nodes, ends) = (self.members.degrees.len() as f64, self.members.link_ends as f64);
            let total = (per_node + departure) * nodes + loss * ends;
            self.day += -(1.0 - self.rng.random::<f64>()).ln() / total;
            if self.day.is_nan() || self.day >= time {
                // The waiting time has no memory: what was not due before `time` starts anew.
                self.day = time;
                return Ok(());
            }
            let pick = self.rng.random::<f64>() * total;
            if pick < per_node * nodes {
                self.land(1)?;
            } else if pick < (per_node + departure) * nodes {
                self.members.depart(&mut self.rng);
            } else {
                self.members.lose_end(&mut self.rng);
            }
        }
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
        check_held(more, self.members.degrees.len(), self.members.link_ends)
    }
}

fn check_held(more: u64, nodes: usize, ends: u64) -> Result<(), SimulationError> {
    let held = u128::from(more) + u128::from(ends).max(nodes as u128);
    if held > u128::from(MAX_HELD) { Err(SimulationError::TooLarge { held }) } else { Ok(()) }
}

fn draw_poisson(mean: f64, rng: &mut SmallRng) -> u64 {
    // `Poisson::new` refuses a mean of 0, which is a certain 0.
    Poisson::new(mean).map_or(0, |law| law.sample(rng) as u64)
}

//! Random numbers that two networks have in common.

use rand::rngs::SmallRng;
use rand::{RngExt, SeedableRng};

/// Odd, and as good as random: 2^64 over the golden ratio. Its multiples differ in all bits (Knuth 1973, section 6.4, from
/// memory).
const SPREAD: u64 = 0x9E37_79B9_7F4A_7C15;

/// A stream for every part of every arrival.
pub(super) struct Streams {
    seed: u64,
    /// Number of the arrival in hand; the first is 1.
    arrival: u64,
    /// Expected arrivals of the plan at which the next one comes.
    next: f64,
}

/// Parts of an arrival that draw apart, so that a difference in one does not shift the draws of another.
#[derive(Clone, Copy)]
pub(super) enum Part {
    /// When the next one comes.
    Waiting,
    /// The ends that land with it.
    Landing,
    /// The newcomer itself.
    Joining,
}

impl Streams {
    pub fn new(seed: u64) -> Self {
        let mut streams = Self { seed, arrival: 0, next: 0.0 };
        streams.wait();
        streams
    }

    /// Expected arrivals of the plan, from day 0, at which the next arrival comes.
    pub fn next_arrival(&self) -> f64 {
        self.next
    }

    /// The next arrival is here.
    pub fn count_arrival(&mut self) {
        self.arrival += 1;
        self.wait();
    }

    /// The stream of a part of the arrival in hand.
    pub fn of(&self, part: Part) -> SmallRng {
        let number = self.arrival.wrapping_mul(3).wrapping_add(part as u64);
        // The first word of a stream seeds the next one: seeds that lie near each other must not share streams.
        let own: u64 = SmallRng::seed_from_u64(self.seed).random();
        SmallRng::seed_from_u64(own.wrapping_add(number.wrapping_mul(SPREAD)))
    }

    fn wait(&mut self) {
        self.next += -(1.0 - self.of(Part::Waiting).random::<f64>()).ln();
    }
}

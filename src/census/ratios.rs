//! Landings by r = k·N/K, the degree of the target over the mean degree.

use crate::model::RatioClass;

/// Bits of the mantissa that tell classes apart: a class is at most 0.8 % wide.
const MANTISSA_BITS: u32 = 7;
/// Bits of the mantissa within a class.
const REST_BITS: u32 = f64::MANTISSA_DIGITS - 1 - MANTISSA_BITS;
/// With N ≤ 2^32, K < 2^64 and k from 1 to K, r lies from 2^−64 to 2^32.
const CLASSES: usize = ((64 + 32 + 1) << MANTISSA_BITS) as usize;

/// Sums over one class, of the distance to the class's own centre: r itself would lose the variance to rounding.
#[derive(Debug, Clone, Copy, Default)]
struct Class {
    landings: u64,
    sum: f64,
    squares: f64,
}

/// Every class there can be.
#[derive(Debug)]
pub struct Ratios {
    zero: u64,
    classes: Vec<Class>,
}

impl Default for Ratios {
    fn default() -> Self {
        Self { zero: 0, classes: vec![Class::default(); CLASSES] }
    }
}

/// The first class's place in the order of all doubles.
fn first() -> u64 {
    2f64.powi(-64).to_bits() >> REST_BITS
}

/// The middle of a class.
#[inline]
fn centre(class: u64) -> f64 {
    f64::from_bits(class << REST_BITS | 1 << (REST_BITS - 1))
}

impl Ratios {
    /// Notes a landing on a node of `degree`, one of `nodes` with `ends` in all; whoever is present came with a link that
    /// has an end somewhere, so there is at least one.
    #[inline]
    pub fn land(&mut self, degree: u32, nodes: u64, ends: u64) {
        if degree == 0 {
            self.zero += 1;
            return;
        }
        let ratio = (u64::from(degree) * nodes) as f64 / ends as f64;
        let class = ratio.to_bits() >> REST_BITS;
        let index = class.saturating_sub(first()) as usize;
        if let Some(sums) = self.classes.get_mut(index) {
            let distance = ratio - centre(class);
            sums.landings += 1;
            sums.sum += distance;
            sums.squares += distance * distance;
        }
    }

    /// The classes that have a landing, in ascending ratio.
    pub fn finish(&self) -> Vec<RatioClass> {
        let zero = RatioClass { ratio: 0.0, variance: 0.0, landings: self.zero };
        let others = self.classes.iter().enumerate().map(|(index, class)| {
            let landings = class.landings as f64;
            let mean = class.sum / landings;
            let variance = (class.squares / landings - mean * mean).max(0.0);
            RatioClass { ratio: centre(first() + index as u64) + mean, variance, landings: class.landings }
        });
        std::iter::once(zero).chain(others).filter(|class| class.landings > 0).collect()
    }
}

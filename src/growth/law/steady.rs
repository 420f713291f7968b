//! The law of a node whose hazards keep their proportion, in closed form.

use statrs::function::gamma::checked_gamma_lr;

use crate::numerics::binomial::{density, incomplete_beta, poisson_density};
use crate::numerics::work::{Work, did};

/// Degrees this far apart, and by the root of the threshold more, are stepped over one by one; farther ones are taken anew, which costs
/// the more the larger the numbers.
const MOST_STEPS: u64 = 64;

/// The degree after some days of a node that loses no link and whose u/v is constant: from degree k it gains a negative binomial
/// number, of mean M + C·k and shape k + M/C; a Poisson number where C = 0.
///
/// Formula: `P(k → ≥ j) = I_{C/(1+C)}(j − k, k + M/C)`, and one link more at the start adds
/// `T_k = P(k+1 → ≥ j) − P(k → ≥ j)`, with `T_{k+1} = T_k·(j − k − 1)/(M + C·(k + 1))` (DLMF 8.17.20). All terms are positive, so sums
/// that run up from small k lose nothing.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct SteadyLaw {
    /// M: expected links gained at the uniform hazard, their offspring included.
    pub uniform: f64,
    /// C: expected offspring of one link.
    pub spread: f64,
}

impl SteadyLaw {
    /// The law of a node that is there for the last `share` of the landings per node that this one sees.
    pub fn of_last(&self, share: f64) -> Self {
        if self.spread == 0.0 {
            return Self { uniform: share * self.uniform, spread: 0.0 };
        }
        let spread = (share * self.spread.ln_1p()).exp_m1();
        Self { uniform: self.uniform / self.spread * spread, spread }
    }

    /// P(at least `threshold` links) from `degree`.
    pub fn tail(&self, degree: u64, threshold: u64) -> f64 {
        let Some(gain) = threshold.checked_sub(degree).filter(|&gain| gain > 0) else { return 1.0 };
        let (gain, mean) = (gain as f64, self.mean_gain(degree));
        if mean == 0.0 {
            return 0.0;
        }
        if self.spread == 0.0 {
            return checked_gamma_lr(gain, mean).unwrap_or(0.0);
        }
        let (x, y) = (self.spread / (1.0 + self.spread), 1.0 / (1.0 + self.spread));
        incomplete_beta(gain, mean / self.spread, x, y)
    }

    /// What [`Self::tail`] is at most (Chernoff): e^{−I}, `I = g·ln(g(1 + C)/(Cg + m)) − (m/C)·ln((1 + Cg/m)/(1 + C))` for a gain of g
    /// above its mean m. Two logarithms.
    pub fn most(&self, degree: u64, threshold: u64) -> f64 {
        let (gain, mean) = (threshold.saturating_sub(degree) as f64, self.mean_gain(degree));
        if gain <= mean {
            return 1.0;
        }
        let spread = self.spread;
        let rate = if spread == 0.0 {
            gain * (gain / mean).ln() - (gain - mean)
        } else {
            let shape = mean / spread;
            gain * (gain * (1.0 + spread) / (spread * gain + mean)).ln()
                - shape * ((gain / shape).ln_1p() - spread.ln_1p())
        };
        (-rate).exp()
    }

    /// [`Self::tail`] from each of `degrees`, ascending and below `threshold`, handed to `each` with its place in the list.
    pub fn tails(&self, degrees: &[u64], threshold: u64, mut each: impl FnMut(usize, f64)) {
        let near = MOST_STEPS + threshold.isqrt();
        // P and T of the degree before, T only where it was needed.
        let (mut tail, mut step) = (0.0, None);
        for (place, &degree) in degrees.iter().enumerate() {
            let before = place.checked_sub(1).map(|i| degrees[i]).filter(|before| degree - before <= near);
            if let (Some(before), Some(mut moved)) = (before, step) {
                did(Work::RecurrenceSteps, degree - before);
                for from in before..degree {
                    tail += moved;
                    moved *= (threshold - from - 1) as f64 / (self.uniform + self.spread * (from + 1) as f64);
                }
                step = Some(moved).filter(|&moved| moved > 0.0);
            } else {
                tail = self.tail(degree, threshold);
                step = None;
            }
            each(place, tail.min(1.0));
            let goes_on = degrees.get(place + 1).is_some_and(|next| next - degree <= near);
            step = step
                .filter(|_| goes_on)
                .or_else(|| goes_on.then(|| self.step(degree, threshold)))
                .filter(|&step| step > 0.0);
        }
    }

    /// T_k.
    fn step(&self, degree: u64, threshold: u64) -> f64 {
        let (rest, next) = ((threshold - degree - 1) as f64, self.mean_gain(degree + 1));
        if self.spread == 0.0 {
            return if self.uniform > 0.0 { poisson_density(rest, self.uniform) } else { f64::from(rest == 0.0) };
        }
        let shape = next / self.spread;
        let (x, y) = (self.spread / (1.0 + self.spread), 1.0 / (1.0 + self.spread));
        density(rest, rest + shape, x, y) * shape / ((rest + shape) * y)
    }

    fn mean_gain(&self, degree: u64) -> f64 {
        self.uniform + self.spread * degree as f64
    }
}

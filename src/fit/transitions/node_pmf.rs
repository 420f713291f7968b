//! Probability of one degree after another at constant rates: the closed form behind the likelihood of transitions.

use crate::numerics::gamma::ln_rising;

/// From this degree on a node's law is taken as normal: its gain is then a small share of its degree, and single links do
/// not matter.
const NORMAL_FROM: u64 = 3_000;
/// Rates per period below this are the same as none.
const LEAST_RATE: f64 = 1e-12;
/// A term this much below the largest adds nothing.
const NEGLIGIBLE: f64 = 1e-17;

/// What one period at constant rates does to a node, from day 0 to the share `until` of the period, after which it is dormant
/// and only loses links.
#[derive(Debug, Clone, Copy)]
pub(super) struct PeriodLaw {
    /// Probability that a link and all its descendants are gone at the end.
    lost: f64,
    /// Parameter of the geometric number of further descendants, 1/(1 + C).
    fresh: f64,
    /// C, as in [`crate::growth::NodeLaw`].
    spread: f64,
    /// E, expected descendants of one link, itself included.
    expansion: f64,
    shape: Shape,
}

/// Shape of the negative binomial law of the gain.
#[derive(Debug, Clone, Copy)]
enum Shape {
    /// B + u/v where B links are kept: exact for the linear kernel.
    Kept(f64),
    /// λ/λ' whatever is kept: a kernel taken as straight near the node's degree.
    Fixed(f64),
}

impl Shape {
    fn at(self, kept: f64) -> f64 {
        match self {
            Self::Kept(ratio) => kept + ratio,
            Self::Fixed(shape) => shape,
        }
    }
}

impl PeriodLaw {
    /// Rates u, v, w over the period: gains a node, gains a link, losses a link.
    pub fn new(uniform: f64, preferential: f64, loss: f64, until: f64) -> Self {
        let (u, v) = ((uniform * until).max(LEAST_RATE), (preferential * until).max(LEAST_RATE));
        let net = v - loss * until;
        // C = v·(e^{(v−w)τ} − 1)/(v − w), then thinned by what is lost after falling dormant.
        let kept = (-loss * (1.0 - until)).exp();
        let growth = if net.abs() < 1e-9 { 1.0 + 0.5 * net } else { net.exp_m1() / net };
        let (spread, expansion) = (v * growth * kept, net.exp() * kept);
        Self {
            lost: ((1.0 + spread - expansion) / (1.0 + spread)).clamp(0.0, 1.0),
            fresh: 1.0 / (1.0 + spread),
            spread,
            expansion,
            shape: Shape::Kept(u / v),
        }
    }

    /// Linear rates u, v, w over the period where u may be negative: the tangent of a curved kernel. Only its moments mean
    /// anything.
    pub fn moments(uniform: f64, preferential: f64, loss: f64, before: f64) -> (f64, f64) {
        let net = preferential - loss;
        let growth = if net.abs() < 1e-9 { 1.0 + 0.5 * net } else { net.exp_m1() / net };
        let (expansion, spread) = (net.exp(), preferential * growth);
        // ∫u·e^R(2C + 1) with C linear in e^R: e^R and C move together.
        let immigrants = uniform * growth;
        let mean = before * expansion + immigrants;
        let variance = before * expansion * (2.0 * spread - expansion + 1.0) + immigrants * (1.0 + spread);
        (mean, variance)
    }

    /// The law of a node of degree `before` with this mean and variance at the end: links are kept with probability e^{−w},
    /// and the gain beside them is negative binomial.
    pub fn by_moments(before: f64, (mean, variance): (f64, f64), loss: f64) -> Self {
        let kept = (-loss).exp();
        let gain = (mean - before * kept).max(LEAST_RATE);
        let excess = (variance - before * kept * (1.0 - kept) - gain).max(1e-9 * gain * gain);
        let spread = (excess / gain).max(LEAST_RATE);
        let shape = Shape::Fixed(gain / spread);
        Self { lost: 1.0 - kept, fresh: 1.0 / (1.0 + spread), spread, expansion: kept, shape }
    }

    /// Mean and variance at the end.
    pub fn moments_from(&self, before: f64) -> (f64, f64) {
        let variance = match self.shape {
            Shape::Kept(ratio) => {
                before * self.expansion * (2.0 * self.spread - self.expansion + 1.0)
                    + ratio * self.spread * (1.0 + self.spread)
            }
            Shape::Fixed(shape) => {
                before * self.expansion * (1.0 - self.expansion) + shape * self.spread * (1.0 + self.spread)
            }
        };
        (self.mean(before), variance)
    }

    /// P(degree `after` at the end | degree `before` at the start).
    ///
    /// Formula: `Σ_B Bin(B; k, 1 − a)·NB(j − B; B + u/v, q)`: B of the k links are kept (a = P(lost)), and everything gained
    /// descends from them or from immigrants (Kendall 1948; Bailey 1964, section 8.6).
    pub fn probability(&self, before: u64, after: u64) -> f64 {
        if before >= NORMAL_FROM {
            return self.normal(before as f64, after as f64);
        }
        let (k, j) = (before as f64, after as f64);
        let (ln_fresh, odds) = (-self.spread.ln_1p(), self.spread * self.fresh); // odds = 1 − q
        let most = before.min(after) as f64;
        // Negative binomial of the gain when `most` links are kept.
        let gained = j - most;
        let shape = self.shape.at(most);
        let mut term = ln_rising(shape, gained) - ln_rising(1.0, gained) + shape * ln_fresh + gained * odds.ln();
        if self.lost <= 0.0 {
            return if after < before { 0.0 } else { term.exp() };
        }
        let missing = k - most;
        term += ln_rising(most + 1.0, missing) - ln_rising(1.0, missing)
            + missing * self.lost.ln()
            + most * (-self.lost).ln_1p();
        // Downward in B from the most that can have been kept, by ratios of neighbouring terms.
        let odds_of_loss = self.lost / (1.0 - self.lost);
        let (mut sum, mut relative, mut scale) = (1.0, 1.0_f64, term);
        let mut kept = most;
        while kept > 0.0 {
            // With one link less kept the gain is one more; under the linear kernel its law's shape is one less, too.
            let gain = match self.shape {
                Shape::Kept(ratio) => (kept + ratio - 1.0) * odds / self.fresh,
                Shape::Fixed(shape) => (shape + j - kept) * odds,
            };
            let ratio = kept * odds_of_loss / (k - kept + 1.0) * gain / (j - kept + 1.0);
            relative *= ratio;
            sum += relative;
            kept -= 1.0;
            if sum > 1e200 {
                (relative, scale, sum) = (relative / sum, scale + sum.ln(), 1.0);
            }
            if ratio < 1.0 && relative < NEGLIGIBLE * sum {
                break;
            }
        }
        (scale + sum.ln()).exp()
    }

    fn normal(&self, k: f64, j: f64) -> f64 {
        let (mean, variance) = self.moments_from(k);
        let variance = variance.max(1e-6);
        (-0.5 * (j - mean).powi(2) / variance).exp() / (2.0 * std::f64::consts::PI * variance).sqrt()
    }

    /// Expected degree at the end.
    pub fn mean(&self, before: f64) -> f64 {
        let (Shape::Kept(shape) | Shape::Fixed(shape)) = self.shape;
        before * self.expansion + shape * self.spread
    }
}

#[cfg(test)]
mod tests {
    use super::PeriodLaw;

    /// Sums to one, with the mean and variance of the linear birth–death process with immigration, from any degree.
    #[test]
    fn probabilities_add_up_and_have_the_exact_moments() {
        for (u, v, w) in [(0.3, 0.0, 0.0), (0.05, 0.2, 0.0), (0.4, 0.3, 0.15), (0.1, 0.2, 0.2), (0.0, 0.1, 0.4)] {
            for until in [1.0, 0.4] {
                let law = PeriodLaw::new(u, v, w, until);
                for before in [0, 1, 7, 60] {
                    let p: Vec<f64> = (0..400).map(|after| law.probability(before, after)).collect();
                    let total: f64 = p.iter().sum();
                    let mean: f64 = p.iter().enumerate().map(|(j, p)| j as f64 * p).sum();
                    assert!((total - 1.0).abs() < 1e-11, "{u} {v} {w} {before}: {total}");
                    assert!((mean - law.mean(before as f64)).abs() < 1e-9, "{u} {v} {w} {before}: {mean}");
                    // The two moments by their own equations, m' = u + (v−w)m and V' = 2(v−w)V + (v+w)m + u, in small steps.
                    let (mut m, mut s) = (before as f64, 0.0);
                    let steps = 200_000;
                    for step in 0..steps {
                        let h = 1.0 / f64::from(steps);
                        let on = if f64::from(step) * h < until { 1.0 } else { 0.0 };
                        let (u, v) = (u * on, v * on);
                        let (dm, ds) = (u + (v - w) * m, 2.0 * (v - w) * s + (v + w) * m + u);
                        (m, s) = (m + h * dm, s + h * ds);
                    }
                    let variance: f64 = p.iter().enumerate().map(|(j, p)| (j as f64 - mean).powi(2) * p).sum();
                    assert!((mean - m).abs() < 1e-4 * (1.0 + m) && (variance - s).abs() < 1e-4 * (1.0 + s));
                }
            }
        }
    }

    #[test]
    fn the_normal_law_takes_over_where_the_exact_one_is_normal() {
        let law = PeriodLaw::new(0.1, 0.12, 0.05, 1.0);
        for after in [2_900, 3_100, 3_200, 3_300, 3_400] {
            let (exact, normal) = (law.probability(2_999, after), law.normal(2_999.0, after as f64));
            assert!((exact - normal).abs() < 0.01 * law.normal(2_999.0, 3_210.0), "{after}: {exact} {normal}");
        }
    }
}

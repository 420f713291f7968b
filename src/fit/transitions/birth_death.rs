//! Exact transition probabilities among low degrees for any gain hazard.

/// States kept: degrees 0 to this, the last one standing for all above.
pub(super) const LARGEST_STATE: usize = 96;
/// Probabilities are told for starts up to here, far enough below the last state.
pub(super) const LARGEST_START: u64 = 40;
/// Poisson weights below this are left out.
const NEGLIGIBLE: f64 = 1e-15;

/// P(degree after | degree before) over one period of a birth–death process with gain hazard λ_k and loss hazard w·k.
///
/// Formula: uniformisation, `e^Q = Σ_m Poisson(m; q)·(I + Q/q)^m` with q the largest total hazard (Jensen 1953).
#[derive(Debug, Clone)]
pub(super) struct BirthDeath {
    rows: Vec<Vec<f64>>,
}

impl BirthDeath {
    pub fn new(hazard: impl Fn(f64) -> f64, loss: f64) -> Self {
        let up: Vec<f64> = (0..LARGEST_STATE).map(|k| hazard(k as f64)).chain([0.0]).collect();
        let down: Vec<f64> = (0..=LARGEST_STATE).map(|k| loss * k as f64).collect();
        let fastest = up.iter().zip(&down).map(|(u, d)| u + d).fold(1e-9, f64::max);
        let rows = (0..=LARGEST_START as usize).map(|start| row(start, &up, &down, fastest)).collect();
        Self { rows }
    }

    /// The probability, where it is kept.
    pub fn probability(&self, before: u64, after: u64) -> Option<f64> {
        let row = self.rows.get(before as usize)?;
        row.get(after as usize).filter(|_| (after as usize) < LARGEST_STATE).copied()
    }
}

fn row(start: usize, up: &[f64], down: &[f64], fastest: f64) -> Vec<f64> {
    let mut state = vec![0.0; up.len()];
    state[start] = 1.0;
    let mut sum = vec![0.0; up.len()];
    let (mut weight, mut left, mut step) = ((-fastest).exp(), 1.0, 0.0);
    while left > NEGLIGIBLE {
        for (s, x) in sum.iter_mut().zip(&state) {
            *s += weight * x;
        }
        left -= weight;
        step += 1.0;
        weight *= fastest / step;
        if step > fastest && weight < NEGLIGIBLE {
            break;
        }
        let mut next = vec![0.0; state.len()];
        for (k, &x) in state.iter().enumerate().filter(|&(_, &x)| x > 0.0) {
            let (gain, lose) = (x * up[k] / fastest, x * down[k] / fastest);
            next[k] += x - gain - lose;
            if gain > 0.0 {
                next[k + 1] += gain;
            }
            if lose > 0.0 {
                next[k - 1] += lose;
            }
        }
        state = next;
    }
    sum
}

#[cfg(test)]
mod tests {
    use super::super::node_pmf::PeriodLaw;
    use super::BirthDeath;

    /// On the linear kernel it is the closed form.
    #[test]
    fn it_is_the_closed_form_on_the_linear_kernel() {
        let (u, v, w) = (0.3, 0.2, 0.1);
        let (table, law) = (BirthDeath::new(|k| u + v * k, w), PeriodLaw::new(u, v, w, 1.0));
        for before in [0, 1, 5, 20, 40] {
            for after in [0, 1, 4, 19, 45, 70] {
                let (ours, exact) = (table.probability(before, after).unwrap(), law.probability(before, after));
                assert!((ours - exact).abs() < 1e-11, "{before} to {after}: {ours} {exact}");
            }
        }
    }
}

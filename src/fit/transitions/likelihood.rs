//! The likelihood of one period's transitions under each candidate.

use nalgebra::DMatrix;

use super::super::{FitError, Model};
use super::birth_death::{BirthDeath, LARGEST_STATE};
use super::node_pmf::PeriodLaw;
use crate::growth::{GrowthFactor, growth_factors, power_kernel};
use crate::model::{DegreeCounts, MAX_GROWTH_VARIANCE};
use crate::numerics::elementary::logistic;
use crate::numerics::quadrature::PANEL;
use crate::numerics::scoring::{ScoringMaximum, maximise};

/// Rates per period are sought between these.
const RATES: (f64, f64) = (1e-10, 20.0);
/// At most this share of the nodes is set aside as outliers.
const MOST_OUTLIERS: f64 = 0.05;
/// A row is an outlier when it more likely is one than not.
const OUTLIER_FROM: f64 = 0.5;
/// Hazards a period up to which the exact law of low degrees is worth its steps.
const MOST_STEPS: f64 = 500.0;
/// Expected gains up to which a handful of growth factors stand for all: single gains then blur what lies between them.
const FEW_GAINS: f64 = 0.3;
const FEW_FACTORS: usize = 6;
/// The same for more factors.
const MORE_GAINS: f64 = 8.0;
const MORE_FACTORS: usize = 20;
/// Days at which an active node falls dormant within the period: Gauss–Legendre with two nodes, (1 ∓ 1/√3)/2.
const FALLS_DORMANT: [f64; 2] = [0.211_324_865_405_187_1, 0.788_675_134_594_812_9];

/// What is seen of one period: nodes present at both ends, by degree before and after.
pub(super) struct Panel {
    rows: Vec<(u64, u64)>,
    weights: Vec<f64>,
    /// N, Σφ is made from these: the network at the period's start and end.
    before: DegreeCounts,
    after: DegreeCounts,
    /// Arrivals over nodes, ∫A/N: what an active node falls dormant by.
    turnover: f64,
    shrinks: bool,
    /// Gains a node and gains a link to begin with, half of all gains each; losses a link.
    crude_gains: (f64, f64),
    crude_losses: f64,
}

/// One candidate's fit of one period. Rates are per period.
#[derive(Debug, Clone)]
pub(super) struct PanelFit {
    pub uniform: f64,
    pub preferential: f64,
    pub loss: f64,
    pub dormant_share: f64,
    pub growth_variance: f64,
    pub exponent: f64,
    pub outlier_share: f64,
    pub log_likelihood: f64,
    pub parameters: usize,
    pub converged: bool,
    /// Standard errors of ln(u/v), ln u, ln v, ln w and of the candidate's own parameter (logit d, ln σ² or γ).
    pub errors: Errors,
}

impl PanelFit {
    fn forces(&self) -> Forces {
        Forces {
            uniform: self.uniform,
            preferential: self.preferential,
            loss: self.loss,
            dormant_share: self.dormant_share,
            growth_variance: self.growth_variance,
            exponent: self.exponent,
            outliers: self.outlier_share,
        }
    }
}

/// How the degrees of one class of nodes changed, summed over the nodes.
#[derive(Debug, Clone, Copy)]
pub(super) struct Change {
    /// Smallest degree before of the class.
    pub lowest: u64,
    pub nodes: f64,
    pub observed: f64,
    pub expected: f64,
    pub variance: f64,
}

impl Change {
    fn add(&mut self, other: &Self) {
        self.nodes += other.nodes;
        self.observed += other.observed;
        self.expected += other.expected;
        self.variance += other.variance;
    }
}

/// Standard errors on the scales in which estimates are near normal.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Errors {
    pub log_odds: f64,
    pub log_loss: f64,
    pub own: f64,
}

/// Which coordinates of the likelihood's argument hold what.
#[derive(Clone, Copy)]
struct Layout {
    model: Model,
    uniform: Option<usize>,
    preferential: Option<usize>,
    loss: Option<usize>,
    own: Option<usize>,
    /// The candidate's own parameter, where it is given.
    given: Option<f64>,
    outliers: usize,
    size: usize,
}

/// The forces of one period, read from the likelihood's argument.
struct Forces {
    uniform: f64,
    preferential: f64,
    loss: f64,
    dormant_share: f64,
    growth_variance: f64,
    exponent: f64,
    outliers: f64,
}

impl Layout {
    fn new(model: Model, given: Option<f64>, shrinks: bool) -> Self {
        let mut size = 0;
        let mut next = |wanted: bool| {
            size += usize::from(wanted);
            wanted.then(|| size - 1)
        };
        let uniform = next(model != Model::Preferential);
        let preferential = next(model != Model::Uniform);
        let loss = next(shrinks);
        let own = next(given.is_none() && matches!(model, Model::Power | Model::Dormancy | Model::GrowthVariance));
        let outliers = next(true).unwrap_or(0);
        Self { model, uniform, preferential, loss, own, given, outliers, size }
    }

    fn forces(&self, theta: &[f64]) -> Forces {
        let rate = |index: Option<usize>| index.map_or(0.0, |i| theta[i].exp());
        // Dormancy is sought as a logit, growth variance as a logarithm, the exponent as it is.
        let own = |model: Model, back: fn(f64) -> f64, absent: f64| match (self.model == model, self.own) {
            (false, _) => absent,
            (true, Some(i)) => back(theta[i]),
            (true, None) => self.given.unwrap_or(absent),
        };
        Forces {
            uniform: rate(self.uniform),
            preferential: rate(self.preferential),
            loss: rate(self.loss),
            dormant_share: own(Model::Dormancy, logistic, 0.0),
            growth_variance: own(Model::GrowthVariance, f64::exp, 0.0),
            exponent: own(Model::Power, std::convert::identity, 1.0),
            outliers: MOST_OUTLIERS * logistic(theta[self.outliers]),
        }
    }
}

/// Laws over the growth factors, with few factors and with more; empty without growth variance.
struct Mixtures {
    few: Vec<(f64, PeriodLaw)>,
    more: Vec<(f64, PeriodLaw)>,
}

impl Mixtures {
    fn new(forces: &Forces) -> Self {
        let laws = |count: usize| -> Vec<(f64, PeriodLaw)> {
            if forces.growth_variance == 0.0 {
                return Vec::new();
            }
            let law = |f: &GrowthFactor| {
                let (u, v) = (f.factor * forces.uniform, f.factor * forces.preferential);
                (f.share, PeriodLaw::new(u, v, forces.loss, 1.0))
            };
            growth_factors(forces.growth_variance, count).iter().map(law).collect()
        };
        Self { few: laws(FEW_FACTORS), more: laws(MORE_FACTORS) }
    }
}

/// Degree of an outlier: broad, with a tail fatter than any network's, so that no jump is beyond it.
fn outlier_probability(after: u64) -> f64 {
    const NORMALISED: f64 = 0.57; // Σ_{j≥0} 1/((j+1)·(1+ln(j+1))²) is about 1.75
    let scale = 1.0 + (after as f64).ln_1p();
    NORMALISED / ((after as f64 + 1.0) * scale * scale)
}

impl Panel {
    pub fn new(rows: &[(u64, u64, u64)], before: DegreeCounts, after: DegreeCounts, turnover: f64) -> Self {
        let (mut gained, mut lost) = (0.0, 0.0);
        for &(k, j, n) in rows {
            // One jump does not decide where the search begins.
            let step = (j as f64 - k as f64).clamp(-2.0 - k as f64, 2.0 + k as f64);
            if step > 0.0 { gained += n as f64 * step } else { lost -= n as f64 * step }
        }
        let (nodes, ends) = (before.nodes() as f64, (before.link_ends() as f64).max(1.0));
        Self {
            crude_gains: (0.5 * gained / nodes, 0.5 * gained / ends),
            crude_losses: lost / ends,
            shrinks: rows.iter().any(|&(k, j, _)| j < k),
            rows: rows.iter().map(|&(k, j, _)| (k, j)).collect(),
            weights: rows.iter().map(|&(_, _, nodes)| nodes as f64).collect(),
            before,
            after,
            turnover,
        }
    }

    /// Fits one candidate, its own parameter held where `given`, from `near` when another candidate's fit is known.
    ///
    /// # Errors
    /// Cancellation, asked before each evaluation of the likelihood.
    pub fn fit(
        &self,
        model: Model,
        given: Option<f64>,
        near: Option<&PanelFit>,
        cancelled: &dyn Fn() -> bool,
    ) -> Result<PanelFit, FitError> {
        let layout = Layout::new(model, given, self.shrinks);
        let (start, bounds) = self.start(&layout, near);
        let terms = |theta: &[f64]| match cancelled() {
            true => Err(FitError::Cancelled),
            false => Ok(self.log_terms(&layout.forces(theta))),
        };
        let best = maximise(&start, &bounds, &self.weights, terms)?;
        Ok(self.read(&layout, &best))
    }

    fn start(&self, layout: &Layout, near: Option<&PanelFit>) -> (Vec<f64>, Vec<(f64, f64)>) {
        let rate = |value: f64| value.clamp(100.0 * RATES.0, 0.5 * RATES.1).ln();
        let mut start = vec![0.0; layout.size];
        let mut bounds = vec![(RATES.0.ln(), RATES.1.ln()); layout.size];
        let mut put = |index: Option<usize>, value: f64| {
            if let Some(i) = index {
                start[i] = value;
            }
        };
        match near {
            Some(fit) => {
                put(layout.uniform, rate(fit.uniform));
                put(layout.preferential, rate(fit.preferential));
                put(layout.loss, rate(fit.loss));
            }
            None => {
                put(layout.uniform, rate(self.crude_gains.0));
                put(layout.preferential, rate(self.crude_gains.1));
                put(layout.loss, rate(self.crude_losses));
            }
        }
        put(Some(layout.outliers), -3.0);
        bounds[layout.outliers] = (-12.0, 12.0);
        if let Some(i) = layout.own {
            (start[i], bounds[i]) = match layout.model {
                Model::Power => (1.0, (0.0, 2.0)),
                Model::Dormancy => (-1.0, (-12.0, 4.5)),
                _ => (-1.0, (-12.0, MAX_GROWTH_VARIANCE.ln())),
            };
        }
        (start, bounds)
    }

    /// Shares and laws of the kinds of node there are among those of degree `degree`.
    fn laws(&self, forces: &Forces, mixtures: &Mixtures, degree: u64) -> Vec<(f64, PeriodLaw)> {
        let Forces { uniform: u, preferential: v, loss: w, dormant_share, growth_variance, exponent, .. } = *forces;
        let k = degree as f64;
        if exponent != 1.0 {
            // The tangent half-way along the expected gain, where it errs least over the whole of it.
            let hazard = |x: f64| u + v * power_kernel(x.max(0.0), exponent);
            let middle = k + 0.5 * (hazard(k) - w * k).clamp(-k, k + 1.0);
            let half = 0.5_f64.min(middle.max(0.25));
            let slope = (hazard(middle + half) - hazard(middle - half)) / (2.0 * half);
            let moments = PeriodLaw::moments(hazard(middle) - slope * middle, slope, w, k);
            return vec![(1.0, PeriodLaw::by_moments(k, moments, w))];
        }
        if growth_variance > 0.0 {
            // Where one way ends and the next begins must not move with the rates: the likelihood would jump.
            let (uniform, preferential) = self.crude_gains;
            let gains = uniform + preferential * k;
            let laws = if gains < FEW_GAINS { &mixtures.few } else { &mixtures.more };
            if gains < MORE_GAINS {
                return laws.clone();
            }
            // A handful of factors leaves gaps between the gains they lead to. Poisson gains of gamma-distributed mean are
            // negative binomial, and nearly so these: the law with the mixture's mean and variance has no gaps.
            let (mut mean, mut square) = (0.0, 0.0);
            for (share, law) in laws {
                let (m, s) = law.moments_from(k);
                mean += share * m;
                square += share * (s + m * m);
            }
            return vec![(1.0, PeriodLaw::by_moments(k, (mean, square - mean * mean), w))];
        }
        if dormant_share > 0.0 {
            let still_active = (-self.turnover * dormant_share / (1.0 - dormant_share)).exp();
            // Rates are those of an active node: the network's landings fall on the active share.
            let active = 1.0 - dormant_share;
            let law = |until: f64| PeriodLaw::new(u / active, v / active, w, until);
            let falling = 0.5 * active * (1.0 - still_active);
            let mut laws = vec![(active * still_active, law(1.0)), (dormant_share, law(0.0))];
            laws.extend(FALLS_DORMANT.map(|until| (falling, law(until))));
            return laws;
        }
        vec![(1.0, PeriodLaw::new(u, v, w, 1.0))]
    }

    fn log_terms(&self, forces: &Forces) -> Vec<f64> {
        let by_degree = forces.exponent != 1.0 || forces.growth_variance > 0.0;
        // A curved kernel bends most at low degrees, where an exact law is cheap.
        let hazard = |k: f64| forces.uniform + forces.preferential * power_kernel(k, forces.exponent);
        let slow = hazard(LARGEST_STATE as f64) < MOST_STEPS;
        let low = (forces.exponent != 1.0 && slow).then(|| BirthDeath::new(hazard, forces.loss));
        let mixtures = Mixtures::new(forces);
        let mut laws = self.laws(forces, &mixtures, 0);
        let mut at = 0;
        let term = |&(before, after): &(u64, u64)| {
            if by_degree && before != at {
                (laws, at) = (self.laws(forces, &mixtures, before), before);
            }
            let exact = low.as_ref().and_then(|low| low.probability(before, after));
            let mixture = || laws.iter().map(|(share, law)| share * law.probability(before, after)).sum();
            let probability: f64 = exact.unwrap_or_else(mixture);
            let probability = (1.0 - forces.outliers) * probability + forces.outliers * outlier_probability(after);
            probability.max(f64::MIN_POSITIVE).ln()
        };
        self.rows.iter().map(term).collect()
    }

    fn read(&self, layout: &Layout, best: &ScoringMaximum) -> PanelFit {
        let forces = layout.forces(&best.at);
        let covariance: &DMatrix<f64> = &best.covariance;
        let variance = |i: usize| covariance[(i, i)].max(0.0);
        let log_odds = match (layout.uniform, layout.preferential) {
            (Some(u), Some(v)) => (variance(u) + variance(v) - 2.0 * covariance[(u, v)]).max(0.0).sqrt(),
            _ => 0.0,
        };
        PanelFit {
            uniform: forces.uniform,
            preferential: forces.preferential,
            loss: forces.loss,
            dormant_share: forces.dormant_share,
            growth_variance: forces.growth_variance,
            exponent: forces.exponent,
            outlier_share: forces.outliers,
            log_likelihood: best.value,
            parameters: layout.size,
            converged: best.converged,
            errors: Errors {
                log_odds,
                log_loss: layout.loss.map_or(0.0, |i| variance(i).sqrt()),
                own: layout.own.map_or(0.0, |i| variance(i).sqrt()),
            },
        }
    }

    /// Landed ends over the period, uniform and preferential.
    pub fn landed(&self, fit: &PanelFit) -> (f64, f64) {
        let nodes = log_mean(self.before.nodes() as f64, self.after.nodes() as f64);
        let kernel_sum = |counts: &DegreeCounts| -> f64 {
            counts.iter().map(|(k, n)| n as f64 * power_kernel(k as f64, fit.exponent)).sum()
        };
        let end = kernel_sum(&self.after) * self.attraction_at_end(fit);
        (fit.uniform * nodes, fit.preferential * log_mean(kernel_sum(&self.before), end))
    }

    /// Σ η·k over Σ k at the period's end: under growth variance fast nodes hold more links than their share.
    fn attraction_at_end(&self, fit: &PanelFit) -> f64 {
        let (mut weighed, mut plain) = (0.0, 0.0);
        for f in growth_factors(fit.growth_variance, FEW_FACTORS) {
            let law = PeriodLaw::new(f.factor * fit.uniform, f.factor * fit.preferential, fit.loss, 1.0);
            let ends: f64 = self.before.iter().map(|(k, n)| n as f64 * law.mean(k as f64)).sum();
            weighed += f.share * f.factor * ends;
            plain += f.share * ends;
        }
        if plain > 0.0 { weighed / plain } else { 1.0 }
    }

    /// Rows that more likely are outliers than not: (before, after, nodes).
    pub fn outliers(&self, fit: &PanelFit) -> Vec<(u64, u64, u64)> {
        let forces = fit.forces();
        let terms = self.log_terms(&forces);
        let rows = self.rows.iter().zip(&self.weights).zip(&terms);
        let strange =
            rows.filter(|((row, _), term)| forces.outliers * outlier_probability(row.1) > OUTLIER_FROM * term.exp());
        strange.map(|((&(k, j), &n), _)| (k, j, n as u64)).collect()
    }

    /// Mean change of degree by class of degree before (0, then doubling), as counted without outliers and as fitted.
    pub fn changes(&self, fit: &PanelFit) -> Vec<Change> {
        let forces = fit.forces();
        let (mixtures, outliers) = (Mixtures::new(&forces), self.outliers(fit));
        let mut changes: Vec<Change> = Vec::new();
        for (&(before, after), n) in self.rows.iter().zip(&self.weights) {
            if outliers.binary_search(&(before, after, *n as u64)).is_ok() {
                continue;
            }
            let lowest = if before == 0 { 0 } else { 1 << before.ilog2() };
            let (k, mut mean, mut square) = (before as f64, 0.0, 0.0);
            for (share, law) in self.laws(&forces, &mixtures, before) {
                let (m, s) = law.moments_from(k);
                mean += share * (m - k);
                square += share * (s + (m - k).powi(2));
            }
            let change = Change {
                lowest,
                nodes: *n,
                observed: n * (after as f64 - k),
                expected: n * mean,
                variance: n * (square - mean * mean),
            };
            match changes.last_mut().filter(|last| last.lowest == lowest) {
                Some(last) => last.add(&change),
                None => changes.push(change),
            }
        }
        changes
    }

    /// Law of a newcomer's degree at the period's end from its degree on arrival, averaged over the arrival's day.
    pub fn newcomer_law(&self, fit: &PanelFit) -> impl Fn(u64, u64) -> f64 + use<> {
        let laws: Vec<(f64, PeriodLaw)> = PANEL
            .nodes
            .iter()
            .zip(&PANEL.weights)
            .step_by(3)
            .map(|(&left, &weight)| {
                (weight, PeriodLaw::new(fit.uniform * left, fit.preferential * left, fit.loss * left, 1.0))
            })
            .collect();
        let total: f64 = laws.iter().map(|(weight, _)| weight).sum();
        move |entry, after| laws.iter().map(|(weight, law)| weight / total * law.probability(entry, after)).sum()
    }
}

/// (b − a)/ln(b/a), the mean of 1/x's reciprocal over a straight line from a to b.
pub(super) fn log_mean(a: f64, b: f64) -> f64 {
    let (a, b) = (a.max(f64::MIN_POSITIVE), b.max(f64::MIN_POSITIVE));
    let log = (b / a).ln();
    if log.abs() < 1e-6 { 0.5 * (a + b) } else { (b - a) / log }
}

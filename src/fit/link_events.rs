//! Link events: the exact likelihood of every landing, and the attachment curve without a model.

use statrs::distribution::{ChiSquared, ContinuousCDF};

use super::profile::{ESTIMATE_LEVEL, NORMAL_95, Profile, profile_share, weigh};
use super::{Attachment, Candidate, CurvePoint, FitError, Force, Model, ModelChoice};
use crate::growth::power_kernel;
use crate::model::{AttachmentCell, Estimate, Interval, LinkEvents, Warning};
use crate::numerics::elementary::logistic;
use crate::numerics::intervals::poisson_mean;
use crate::numerics::scoring::maximise;

/// p is found to this.
const SHARE_TOLERANCE: f64 = 1e-7;
/// Points of the curve: single degrees up to this, then ranges growing by [`RANGE_GROWTH`].
const SINGLE_POINTS: u64 = 4;
const RANGE_GROWTH: f64 = 1.6;
/// A linear kernel is doubted from here on.
const DOUBTED: f64 = 0.01;
/// A point of the curve counts as a misfit when its landings are off by more than this factor beyond chance.
const WORTH_A_WARNING: f64 = 1.3;
/// Ranges with fewer landings say little.
const FEWEST_LANDINGS: u64 = 50;

/// What a link list tells.
pub(super) struct LinkEventFit {
    pub attachment: Attachment,
    pub warnings: Vec<Warning>,
    /// p of the power kernel.
    power_share: Force,
}

impl LinkEventFit {
    /// The preferential share under a candidate.
    pub fn share(&self, model: Model) -> Force {
        match model {
            Model::Uniform => Force::given(0.0),
            Model::Preferential => Force::given(1.0),
            Model::Power => self.power_share,
            _ => self.attachment.preferential_share,
        }
    }
}

/// Fits the mix and the kernel exponent to every landing of a link list.
///
/// Formula: `Σ ln[(1−p) + p·r]` over landings, r = k·N/K just before (concave in p); landings of nearly equal r are taken together with
/// their variance, which leaves less than 10⁻⁷ of a landing's term. The exponent: `Σ C ln[(1−p)/N + p·φ/Φ]` over cells of degree in
/// stretches of a few per cent growth, C landings, φ = k^γ, N and Φ averages over the stretch; p stays free, and twice the
/// gain over γ = 1 is read as χ².
pub(super) fn fit_link_events(events: &LinkEvents, cancelled: &dyn Fn() -> bool) -> Result<LinkEventFit, FitError> {
    let log_likelihood = |p: f64| {
        let term = |class: &crate::model::RatioClass| {
            let inner = 1.0 - p + p * class.ratio;
            let spread = if inner > 0.0 { 0.5 * p * p * class.variance / (inner * inner) } else { 0.0 };
            class.landings as f64 * (inner.ln() - spread)
        };
        Ok(events.ratios().iter().map(term).sum())
    };
    let linear = profile_share(ModelChoice::Only(Model::Mix), SHARE_TOLERANCE, log_likelihood, |_| Ok(1.0))?;
    let share = Force { estimate: linear.share, excursion: linear.excursion };
    let power = PowerFit::new(events, linear.share.value, cancelled)?;
    let mut candidates = linear.candidates.clone();
    // The two likelihoods differ by a constant; their differences to the mix do not.
    if let Some(mix) = candidates.iter().find(|c| c.model == Model::Mix).copied() {
        let log_likelihood = mix.log_likelihood + power.gain;
        let aic = 4.0 - 2.0 * log_likelihood;
        candidates.push(Candidate {
            model: Model::Power,
            preferential_share: power.share.value(),
            parameter: Some(power.exponent.value()),
            log_likelihood,
            aic,
            weight: 0.0,
        });
    }
    weigh(&mut candidates);
    let curve = curve(events, linear.share.value);
    let warnings = warnings(&power, &curve, &linear);
    let attachment = Attachment {
        landings: events.landings(),
        preferential_share: share,
        kernel_exponent: power.exponent,
        linear_p_value: power.p_value,
        curve,
        candidates,
    };
    Ok(LinkEventFit { attachment, warnings, power_share: power.share })
}

struct PowerFit {
    share: Force,
    exponent: Force,
    /// Log-likelihood over that of γ = 1.
    gain: f64,
    p_value: f64,
}

impl PowerFit {
    fn new(events: &LinkEvents, share: f64, cancelled: &dyn Fn() -> bool) -> Result<Self, FitError> {
        let logit = |p: f64| (p / (1.0 - p)).ln().clamp(-12.0, 12.0);
        let weights: Vec<f64> =
            cells(events).filter(|(_, cell)| cell.landings > 0).map(|(_, cell)| cell.landings as f64).collect();
        let terms = |theta: &[f64]| match cancelled() {
            true => Err(FitError::Cancelled),
            false => Ok(log_terms(events, logistic(theta[0]), theta.get(1).copied().unwrap_or(1.0))),
        };
        let start = logit(share.clamp(0.02, 0.98));
        let linear = maximise(&[start], &[(-12.0, 12.0)], &weights, terms)?;
        let best = maximise(&[linear.at[0], 1.0], &[(-12.0, 12.0), (0.0, 2.0)], &weights, terms)?;
        let gain = (best.value - linear.value).max(0.0);
        let error = |i: usize| best.covariance[(i, i)].max(0.0).sqrt();
        let force = |value: f64, error: f64, back: &dyn Fn(f64) -> f64| {
            let end = |sign: f64| back(value + sign * NORMAL_95 * error);
            let interval = Interval { level: ESTIMATE_LEVEL, low: end(-1.0), high: end(1.0) };
            let estimate = Estimate { value: back(value), interval: Some(interval) };
            Force { estimate, excursion: (back(value - error), back(value + error)) }
        };
        Ok(Self {
            share: force(best.at[0], error(0), &logistic),
            exponent: force(best.at[1], error(1), &|x| x.clamp(0.0, 2.0)),
            gain,
            p_value: ChiSquared::new(1.0).map_or(1.0, |law| law.sf(2.0 * gain)),
        })
    }
}

fn cells(events: &LinkEvents) -> impl Iterator<Item = (usize, &AttachmentCell)> {
    events.windows().iter().enumerate().flat_map(|(i, window)| window.cells.iter().map(move |cell| (i, cell)))
}

/// Mean degree of a cell's nodes.
fn mean_degree(cell: &AttachmentCell) -> f64 {
    if cell.node_exposure > 0.0 { cell.end_exposure / cell.node_exposure } else { cell.lowest as f64 }
}

/// ln of the probability of a landing on one node of each cell that has landings, window by window.
fn log_terms(events: &LinkEvents, share: f64, exponent: f64) -> Vec<f64> {
    let mut terms = Vec::new();
    for window in events.windows() {
        let phi: Vec<f64> = window.cells.iter().map(|cell| power_kernel(mean_degree(cell), exponent)).collect();
        let (mut nodes, mut attraction, mut landings) = (0.0, 0.0, 0.0);
        for (cell, phi) in window.cells.iter().zip(&phi) {
            nodes += cell.node_exposure;
            attraction += cell.node_exposure * phi;
            landings += cell.landings as f64;
        }
        for (_, phi) in window.cells.iter().zip(&phi).filter(|(cell, _)| cell.landings > 0) {
            // Nobody attracts while no node has a link: then all ends pick uniformly.
            let preferential =
                if attraction > 0.0 { share * phi * landings / attraction } else { share * landings / nodes };
            terms.push(((1.0 - share) * landings / nodes + preferential).max(f64::MIN_POSITIVE).ln());
        }
    }
    terms
}

/// Landings over exposure by range of degree, all windows together.
fn curve(events: &LinkEvents, share: f64) -> Vec<CurvePoint> {
    let mut ranges: Vec<(u64, u64)> = (0..=SINGLE_POINTS).map(|k| (k, k)).collect();
    let largest = cells(events).map(|(_, cell)| cell.highest).max().unwrap_or(0);
    while let Some(&(_, last)) = ranges.last().filter(|&&(_, last)| last < largest) {
        ranges.push((last + 1, ((last + 1) as f64 * RANGE_GROWTH) as u64));
    }
    let mut sums = vec![(0_u64, 0.0, 0.0); ranges.len()]; // landings, expected if all drew alike, expected by the mix
    for window in events.windows() {
        let landings: f64 = window.cells.iter().map(|cell| cell.landings as f64).sum();
        let nodes: f64 = window.cells.iter().map(|cell| cell.node_exposure).sum();
        let ends: f64 = window.cells.iter().map(|cell| cell.end_exposure).sum();
        for cell in &window.cells {
            let range = ranges.partition_point(|&(_, highest)| (highest as f64) < mean_degree(cell).floor());
            let Some(sum) = sums.get_mut(range) else { continue };
            let alike = landings * cell.node_exposure / nodes;
            let by_degree = if ends > 0.0 { landings * cell.end_exposure / ends } else { alike };
            sum.0 += cell.landings;
            sum.1 += alike;
            sum.2 += (1.0 - share) * alike + share * by_degree;
        }
    }
    let point = |(&(lowest, highest), &(landings, alike, fitted)): (&(u64, u64), &(u64, f64, f64))| {
        let (low, high) = poisson_mean(landings as f64, ESTIMATE_LEVEL);
        let interval = Interval { level: ESTIMATE_LEVEL, low: low / alike, high: high / alike };
        let attraction = Estimate { value: landings as f64 / alike, interval: Some(interval) };
        CurvePoint { lowest, highest, landings, attraction, fitted: fitted / alike }
    };
    ranges.iter().zip(&sums).filter(|(_, sum)| sum.1 > 0.0).map(point).collect()
}

fn warnings(power: &PowerFit, curve: &[CurvePoint], linear: &Profile) -> Vec<Warning> {
    let mut warnings = Vec::new();
    let exponent = power.exponent.value();
    if power.p_value < DOUBTED && exponent > 1.0 && power.exponent.excursion.0 > 1.0 {
        let detail = format!(
            "links follow degree to the power {exponent:.2}, more than in proportion: such a network has no steady tail, a few \
             nodes end up with most links, and forecasts of large hubs are too low"
        );
        warnings.push(Warning::new("winner_takes_all", detail));
    }
    let misfits = curve.iter().filter(|point| {
        let inside = point.attraction.interval.is_some_and(|i| point.fitted >= i.low && point.fitted <= i.high);
        let ratio = point.attraction.value / point.fitted;
        point.landings >= FEWEST_LANDINGS && !inside && !(WORTH_A_WARNING.recip()..WORTH_A_WARNING).contains(&ratio)
    });
    let worst = misfits.max_by(|a, b| {
        let off = |p: &CurvePoint| (p.attraction.value / p.fitted).ln().abs();
        off(a).total_cmp(&off(b))
    });
    if let Some(point) = worst {
        let detail = format!(
            "no mix reproduces where links landed: nodes with {} to {} links drew {:.2} times what a preferential share of {:.2} \
             gives them",
            point.lowest,
            point.highest,
            point.attraction.value / point.fitted,
            linear.share.value
        );
        warnings.push(Warning::new("attachment_misfit", detail));
    }
    warnings
}

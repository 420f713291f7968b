//! Rung 2: successive snapshots, by the flow of nodes across thresholds.

use std::cell::Cell;

use super::profile::{AGE_WEIGHT, Profile, profile_share};
use super::{FitError, Forces, ModelChoice, PeriodRates, TransitionSummary};
use crate::growth::{Course, GrowthError, NetworkLaw, NodeLaw};
use crate::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, GrowthParameters, Warning,
};
use crate::numerics::optimise::minimise;
use crate::numerics::quadrature::PANEL;
use crate::numerics::tolerances::Accuracy;

/// The preferential share is found to this.
const SHARE_TOLERANCE: f64 = 1e-4;
/// The same where no interval is asked for.
const POINT_TOLERANCE: f64 = 2e-3;
/// Half-width of difference quotients in p.
const SHARE_STEP: f64 = 2e-3;
/// Thresholds grow by this factor (about; they are whole numbers).
const THRESHOLD_GROWTH: f64 = std::f64::consts::SQRT_2;
/// A threshold counts while at least this many nodes were past it at the period's end.
const FEWEST_NODES: u64 = 5;
/// Older periods than this many would weigh less than 2 % of the newest.
const MOST_PERIODS: usize = 12;
/// Crossings a threshold that no growth need explain, nodes.
const UNEXPLAINED: f64 = 0.5;
/// Flows with less variance than this say nothing of dispersion.
const LEAST_VARIANCE: f64 = 1.0;

/// What the totals of one period between two snapshots say, taken at constant rates.
#[derive(Debug, Clone)]
pub(super) struct Period<'a> {
    before: &'a DegreeCounts,
    after: &'a DegreeCounts,
    pub days: f64,
    pub arrivals_per_day: f64,
    pub links_per_arrival: f64,
    thresholds: Vec<u64>,
    forces: GrowthParameters,
    weight: f64,
}

/// A fit by crossing flows and how far its flows scatter about it.
pub(super) struct SuccessiveFit {
    pub profile: Profile,
    /// Mean of (observed − fitted)²/variance over periods and thresholds.
    pub dispersion: f64,
    /// Typical |observed − fitted|/fitted of the flows.
    pub flow_error: f64,
}

/// Reads arrivals and landed links of each period off the totals; periods without growth are skipped with a warning.
///
/// # Errors
/// When no period has both arrivals and landed links.
pub(super) fn periods<'a>(
    evidence: &'a Evidence,
    entry: &EntryDegrees,
    forces: &Forces,
    links_per_node_day: f64,
    moved: Option<&TransitionSummary>,
) -> Result<(Vec<Period<'a>>, Vec<Warning>), FitError> {
    let (mut periods, mut warnings) = (Vec::new(), Vec::new());
    let oldest = (evidence.snapshots().len() - 1).saturating_sub(MOST_PERIODS);
    for (before, after, days) in evidence.periods().skip(oldest) {
        // One departing hub can take more ends than all that landed: then transitions still tell what landed.
        let same = |rates: &&PeriodRates| (rates.from, rates.to) == (before.as_of, after.as_of);
        let landed = moved.and_then(|moved| moved.periods.iter().find(same)).map(|rates| rates.landed_per_day);
        let (kind, forces) = (evidence.kind(), (forces, links_per_node_day));
        match Period::read(kind, &before.counts, &after.counts, days, entry, forces, landed) {
            Some(period) => periods.push(period),
            None => {
                let detail = format!(
                    "between {} and {} nodes and links did not both grow, so that period says nothing of the mix",
                    before.as_of, after.as_of
                );
                warnings.push(Warning::new("period_without_growth", detail));
            }
        }
    }
    for (age, period) in periods.iter_mut().rev().enumerate() {
        period.weight = AGE_WEIGHT.powi(age as i32);
    }
    if periods.is_empty() {
        let detail = "between the snapshots nodes and links did not both grow, so their flows cannot tell the attachment \
                      mix; give departures_per_node_day and link_losses_per_link_day if nodes leave or links are lost, a \
                      single snapshot, or fixed.preferential_share";
        return Err(FitError::NotIdentified { detail: detail.into() });
    }
    Ok((periods, warnings))
}

/// Fits the preferential share by the composite Poisson likelihood of the crossing flows (Varin & Vidoni 2005).
///
/// Formula: `Σ_periods w·Σ_j [D_j ln M_j(p) − M_j(p)]`, D_j the observed and M_j the expected number of nodes that came
/// past threshold j (log-spaced), both plus ½: half a node of unexplained crossings a threshold keeps one renamed or merged
/// node, which no growth explains, from deciding the fit. Its fall is scaled by information over score variance (Godambe 1960). In that variance
/// flows at different thresholds share nodes. That all compete for a known number of links narrows it by 3 to 6 % on grown
/// networks, and is left out.
pub(super) fn fit_successive(
    periods: &[Period],
    choice: ModelChoice,
    cancelled: &dyn Fn() -> bool,
) -> Result<SuccessiveFit, FitError> {
    let log_likelihood = |p: f64| flow_log_likelihood(periods, p, cancelled);
    let (mut dispersion, mut flow_error) = (1.0, 0.0);
    let scale_at = |p: f64| {
        let (mut information, mut variance) = (0.0, 0.0);
        let (mut misfits, mut errors) = (Vec::new(), Vec::new());
        for period in periods {
            let (low, high) = ((p - SHARE_STEP).max(0.0), (p + SHARE_STEP).min(1.0));
            let (below, here, above) =
                (period.flows(low, cancelled)?, period.flows(p, cancelled)?, period.flows(high, cancelled)?);
            let slope: Vec<f64> = above.iter().zip(&below).map(|(a, b)| (a.mean - b.mean) / (high - low)).collect();
            let weights: Vec<f64> = slope.iter().zip(&here).map(|(s, m)| s / (m.mean + UNEXPLAINED)).collect();
            let covariance = period.covariance(p)?;
            information += period.weight * slope.iter().zip(&weights).map(|(s, w)| s * w).sum::<f64>();
            variance += period.weight * period.weight * quadratic_form(&covariance, &weights);
            for (i, (observed, expected)) in period.observed(&here).iter().zip(&here).enumerate() {
                if covariance[i][i] >= LEAST_VARIANCE {
                    misfits.push((observed - expected.mean).powi(2) / covariance[i][i]);
                    errors.push((observed / expected.mean - 1.0).abs());
                }
            }
        }
        if !misfits.is_empty() {
            dispersion = misfits.iter().sum::<f64>() / misfits.len() as f64;
            // The median times 1.4826 is the standard deviation of a normal law, and one renamed hub does not move it.
            errors.sort_by(f64::total_cmp);
            flow_error = 1.4826 * errors[errors.len() / 2];
        }
        // A misfit beyond sampling noise widens the interval in the same proportion, and never narrows it.
        // Flows that do not answer to p say nothing of it: its interval is then all of [0, 1].
        Ok(if information > 0.0 { information / (variance * dispersion.max(1.0)) } else { 0.0 })
    };
    let profile = profile_share(choice, SHARE_TOLERANCE, log_likelihood, scale_at)?;
    Ok(SuccessiveFit { profile, dispersion, flow_error })
}

/// The likeliest preferential share by crossing flows, alone and to a coarser tolerance: a forecast moves by less than its
/// rounding, at a tenth of the cost of [`fit_successive`].
///
/// # Errors
/// Those of [`fit_successive`].
pub(super) fn likeliest_share(periods: &[Period], cancelled: &dyn Fn() -> bool) -> Result<f64, FitError> {
    let failure = Cell::new(None);
    let best = minimise(0.0, 1.0, POINT_TOLERANCE, |p| match flow_log_likelihood(periods, p, cancelled) {
        Ok(value) => -value,
        Err(error) => {
            failure.set(failure.take().or(Some(error)));
            f64::INFINITY
        }
    });
    match failure.take() {
        Some(error) => Err(error),
        None if best.converged => Ok(best.at),
        None => Err(FitError::NotConverged { detail: format!("the preferential share stood at {}", best.at) }),
    }
}

/// Σ_periods w·Σ_j [D_j ln M_j(p) − M_j(p)], as [`fit_successive`] has it.
fn flow_log_likelihood(periods: &[Period], p: f64, cancelled: &dyn Fn() -> bool) -> Result<f64, FitError> {
    if cancelled() {
        return Err(FitError::Cancelled);
    }
    let mut sum = 0.0;
    for period in periods {
        let flows = period.flows(p, cancelled)?;
        for (observed, expected) in period.observed(&flows).iter().zip(&flows) {
            let (observed, expected) = ((observed + UNEXPLAINED).max(0.0), expected.mean + UNEXPLAINED);
            sum += period.weight * (observed * expected.ln() - expected);
        }
    }
    Ok(sum)
}

/// Expected nodes that come past a threshold, and those past it before that are expected to stay.
#[derive(Clone, Copy)]
struct Flow {
    mean: f64,
    kept: f64,
}

impl<'a> Period<'a> {
    fn read(
        kind: DegreeKind,
        before: &'a DegreeCounts,
        after: &'a DegreeCounts,
        days: f64,
        entry: &EntryDegrees,
        (given, links_per_node_day): (&Forces, f64),
        landed_per_day: Option<f64>,
    ) -> Option<Self> {
        let (departures, losses) = (given.departures.value(), given.link_losses.value());
        let plan = ArrivalPlan::constant(1.0).ok()?;
        let forces = GrowthParameters::new(kind, AttachmentMix::UNIFORM, plan, entry.clone(), 0.0).ok()?;
        let forces = forces
            .with_losses(departures, losses)
            .and_then(|forces| forces.with_links_per_node_day(links_per_node_day))
            .and_then(|forces| forces.with_kernel_exponent(given.kernel_exponent.value()))
            .and_then(|forces| forces.with_dormant_share(given.dormant_share.value()))
            .and_then(|forces| forces.with_growth_variance(given.growth_variance.value()))
            .ok()?;
        // dN/dt = A − δN and dK/dt = (ℓ+ē)A − θK at constant rates, solved for A and ℓ from both ends.
        let inflow = |start: f64, end: f64, hazard: f64| {
            let decay = (-hazard * days).exp();
            let elapsed = if hazard > 0.0 { -(-hazard * days).exp_m1() / hazard } else { days };
            (end - start * decay) / elapsed
        };
        let theta = forces.end_loss_hazard() + departures;
        let arrivals_per_day = inflow(before.nodes() as f64, after.nodes() as f64, departures);
        let ends_per_day = inflow(before.link_ends() as f64, after.link_ends() as f64, theta);
        let mut links_per_arrival = ends_per_day / arrivals_per_day - entry.mean();
        if links_per_arrival <= 0.0 {
            links_per_arrival = landed_per_day? / arrivals_per_day;
        }
        if !(arrivals_per_day > 0.0 && links_per_arrival > 0.0) {
            return None;
        }
        let arrivals = ArrivalPlan::constant(arrivals_per_day).ok()?;
        let mut forces = forces.with_links_per_arrival(links_per_arrival).ok()?.with_arrivals(arrivals);
        if links_per_node_day > 0.0 {
            // K(t) is linear in ℓ: what ι lands is what ends up beyond the observed total, and ℓ lands that much less.
            let reached = Course::new(before, forces.clone(), days).ok()?.link_ends(days);
            let without = forces.clone().with_links_per_arrival(0.0).ok()?;
            let slope = (reached - Course::new(before, without, days).ok()?.link_ends(days)) / links_per_arrival;
            links_per_arrival -= (reached - after.link_ends() as f64) / slope;
            if links_per_arrival < 0.0 {
                return None;
            }
            forces = forces.with_links_per_arrival(links_per_arrival).ok()?;
        }
        let mut thresholds = vec![entry.smallest() + 1];
        while let Some(&last) = thresholds.last().filter(|&&last| after.tail_size(last) >= FEWEST_NODES) {
            thresholds.push((last as f64 * THRESHOLD_GROWTH).ceil() as u64);
        }
        thresholds.pop();
        if thresholds.is_empty() {
            return None;
        }
        Some(Self { before, after, days, arrivals_per_day, links_per_arrival, thresholds, forces, weight: 1.0 })
    }

    /// The counts at the period's end.
    pub fn after(&self) -> &'a DegreeCounts {
        self.after
    }

    /// The forces that led through the period, with preferential share `p`.
    pub fn forces(&self, p: f64) -> GrowthParameters {
        self.forces.clone().with_mix(AttachmentMix::new(p).unwrap_or(AttachmentMix::UNIFORM))
    }

    fn course(&self, p: f64) -> Result<Course, GrowthError> {
        Course::new(self.before, self.forces(p), self.days)
    }

    fn flows(&self, p: f64, cancelled: &dyn Fn() -> bool) -> Result<Vec<Flow>, FitError> {
        let course = match self.course(p) {
            // So preferential a mix gives no node its first link: nothing flows.
            Err(GrowthError::NobodyStarts) => return Ok(vec![Flow { mean: 0.0, kept: 0.0 }; self.thresholds.len()]),
            course => course?,
        };
        let law = NetworkLaw::at(&course, self.before, self.days)?.until(cancelled);
        let flow = |&threshold: &u64| {
            let sum = law.rough_tail(threshold)?;
            Ok(Flow { mean: sum.mean - sum.kept, kept: sum.kept })
        };
        self.thresholds.iter().map(flow).collect()
    }

    /// D_j: nodes past each threshold at the end, beyond those that were past it before and are expected to stay.
    fn observed(&self, flows: &[Flow]) -> Vec<f64> {
        let past = |(&threshold, flow): (&u64, &Flow)| self.after.tail_size(threshold) as f64 - flow.kept;
        self.thresholds.iter().zip(flows).map(past).collect()
    }

    /// Thresholds past which there are fewer nodes at the end than at the start.
    pub fn shrunken(&self) -> Vec<(u64, u64, u64)> {
        let sizes = self.thresholds.iter().map(|&j| (j, self.before.tail_size(j), self.after.tail_size(j)));
        sizes.filter(|&(_, before, after)| after < before).collect()
    }

    /// Expected tail sizes at the period's end, with the observed ones: the picture of the fit.
    pub fn fitted_tail(&self, p: f64, cancelled: &dyn Fn() -> bool) -> Result<Vec<(u64, u64, f64)>, FitError> {
        let flows = self.flows(p, cancelled)?;
        let row =
            |(&threshold, flow): (&u64, &Flow)| (threshold, self.after.tail_size(threshold), flow.mean + flow.kept);
        Ok(self.thresholds.iter().zip(&flows).map(row).collect())
    }

    /// Covariance of the numbers past each threshold, nodes taken as independent given the totals.
    fn covariance(&self, p: f64) -> Result<Vec<Vec<f64>>, FitError> {
        let course = self.course(p)?;
        let size = self.thresholds.len();
        let mut upper = vec![vec![0.0; size]; size];
        let mut add = |weight: f64, tails: &[f64]| {
            for i in 0..size {
                for j in i..size {
                    upper[i][j] += weight * (tails[j] - tails[i] * tails[j]);
                }
            }
        };
        let survival = course.survival(self.days);
        let law = NodeLaw::between(&course, 0.0, self.days);
        for (degree, nodes) in self.before.iter() {
            add(nodes as f64, &tails(&law, &[(degree, 1.0)], &self.thresholds, survival)?);
        }
        // Newcomers are known in number, and their arrival times spread evenly.
        for (&x, &w) in PANEL.nodes.iter().zip(&PANEL.weights) {
            let arrival = x * self.days;
            let law = NodeLaw::between(&course, arrival, self.days);
            let newcomers = w * self.days * self.arrivals_per_day;
            let entry = self.forces.entry.shares();
            add(newcomers, &tails(&law, entry, &self.thresholds, course.survival(self.days - arrival))?);
        }
        Ok((0..size).map(|i| (0..size).map(|j| upper[i.min(j)][i.max(j)]).collect()).collect())
    }
}

/// Σ_ij w_i·C_ij·w_j.
fn quadratic_form(matrix: &[Vec<f64>], weights: &[f64]) -> f64 {
    let row = |(row, x): (&Vec<f64>, &f64)| x * row.iter().zip(weights).map(|(c, y)| c * y).sum::<f64>();
    matrix.iter().zip(weights).map(row).sum()
}

/// Probabilities that a node drawn from `starts` stays and ends past each threshold; zero beyond the first negligible one.
fn tails(law: &NodeLaw, starts: &[(u64, f64)], thresholds: &[u64], survival: f64) -> Result<Vec<f64>, GrowthError> {
    const NEGLIGIBLE: f64 = 1e-9;
    let mut values = vec![0.0; thresholds.len()];
    for (value, &threshold) in values.iter_mut().zip(thresholds) {
        *value = survival * law.mixture_tail(starts, threshold, Accuracy::Working)?;
        if *value < NEGLIGIBLE {
            break;
        }
    }
    Ok(values)
}

#[cfg(test)]
mod tests {
    use super::Period;
    use crate::fit::{Force, Forces};
    use crate::model::{DegreeCounts, DegreeKind, EntryDegrees};

    /// Arrivals and links read off a period, put back into the mean field, end at the period's totals, losses or not.
    #[test]
    fn rates_read_off_a_period_lead_back_to_its_totals() {
        let before = DegreeCounts::from_pairs(&[(1, 900), (5, 90), (40, 10)]).unwrap();
        let after = DegreeCounts::from_pairs(&[(1, 1_100), (5, 190), (40, 20)]).unwrap();
        for kind in [DegreeKind::Received, DegreeKind::Total] {
            for (departures, losses, per_node) in
                [(0.0, 0.0, 0.0), (1e-3, 0.0, 0.0), (0.0, 2e-3, 1e-3), (1e-3, 2e-3, 0.0), (0.0, 0.0, 2e-3)]
            {
                let forces = Forces {
                    departures: Force::given(departures),
                    link_losses: Force::given(losses),
                    kernel_exponent: Force::given(1.0),
                    dormant_share: Force::given(0.0),
                    growth_variance: Force::given(0.0),
                };
                let entry = EntryDegrees::single(1);
                let period = Period::read(kind, &before, &after, 60.0, &entry, (&forces, per_node), None).unwrap();
                let course = period.course(0.5).unwrap();
                assert!((course.nodes(60.0) / after.nodes() as f64 - 1.0).abs() < 1e-12);
                assert!((course.link_ends(60.0) / after.link_ends() as f64 - 1.0).abs() < 1e-12);
            }
        }
    }
}

//! One origin's forecasts by every member, for the record: what was known then, carried forward.

use jiff::Timestamp;

use super::OriginError;
use super::ahead::{GivenRates, Rates, expected_rates};
use super::member::{HALF_A_NODE, Member, Step, Totals, Trend};
use crate::fit::{FitError, FitRequest, Mechanism, Model, mechanisms};
use crate::forecast::ForecastError;
use crate::growth::{Course, GrowthError, NetworkLaw};
use crate::model::{ArrivalPlan, Evidence, GrowthParameters, Snapshot, days_between};

/// Snapshots of the newest period alone tell today's mix; so many more are looked at when it shows no growth.
const OLDER_SNAPSHOTS: usize = 4;
/// Nodes added to both sides of a correction: flows of a few nodes are chance.
const CORRECTION_DAMPING: f64 = 5.0;
/// A correction lies between a third and three.
const MOST_CORRECTION: f64 = 3.0;
/// Thresholds at which an uncertainty of rates is measured at most.
const MOST_SIDE_THRESHOLDS: usize = 24;
/// With fewer arrivals than this share of the nodes, links are taken to land per node and day: per arrival there would be
/// too many at once.
const FEW_ARRIVALS: f64 = 1e-3;

/// A rate that the totals ahead depend on.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rate {
    /// Arrivals.
    Arrivals,
    /// Links per arrival.
    Links,
}

/// What a target's totals are.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Growth {
    /// Those that came, or are given.
    Known,
    /// Those expected at the origin.
    Expected,
    /// Expected, but for one rate at one standard deviation below; by the plain mix only.
    Low(Rate),
    /// The same above.
    High(Rate),
}

/// A date to look ahead to, and the totals then.
#[derive(Debug, Clone, PartialEq)]
pub struct Target {
    /// The date.
    pub date: Timestamp,
    /// Periods ahead of the origin.
    pub ahead: f64,
    /// What the totals are.
    pub growth: Growth,
    /// N and K then.
    pub totals: (f64, f64),
    /// The rates that lead there; none: constant ones.
    pub rates: Option<Rates>,
}

/// What one candidate's law says of the tails at one date: means, and those of nodes in the tail at the start that are in it
/// still; one value a threshold.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct LawSizes {
    /// Tail sizes.
    pub mean: Vec<f64>,
    /// Of them, nodes that were in the tail at the start.
    pub kept: Vec<f64>,
    /// Sampling variance of the tail sizes.
    pub variance: Vec<f64>,
}

/// What the candidates say of one date.
#[derive(Debug, Clone, PartialEq)]
pub struct Outlook {
    /// The date and its totals.
    pub target: Target,
    /// One entry a candidate of [`OriginRecord::models`]; none where its law cannot be computed.
    pub laws: Vec<Option<LawSizes>>,
}

/// What was known at one origin and what every candidate made of it.
#[derive(Debug, Clone, PartialEq)]
pub struct OriginRecord {
    /// The origin's date.
    pub as_of: Timestamp,
    /// Thresholds, ascending.
    pub thresholds: Vec<u64>,
    /// Totals at the start of the newest period and at the origin; days count from the origin.
    pub totals: (Totals, Totals),
    /// Tail sizes at both, one pair a threshold.
    pub sizes: Vec<(f64, f64)>,
    /// Whether no node leaves and no link is lost, so that nodes in a tail are in it for good.
    pub lossless: bool,
    /// Candidates that could be fitted.
    pub models: Vec<Model>,
    /// What each made of the newest period, from its start: its fit in hindsight.
    pub hindsight: Vec<Option<LawSizes>>,
    /// What each made of the dates ahead.
    pub outlooks: Vec<Outlook>,
}

/// What a record of an origin is to hold.
#[derive(Debug, Clone, PartialEq)]
pub struct RecordPlan {
    /// Thresholds, ascending.
    pub thresholds: Vec<u64>,
    /// So many snapshots after the origin are looked ahead to.
    pub ahead: usize,
    /// Whether also by the arrivals and links expected at the origin, besides those that came.
    pub expected: bool,
    /// What is asked of the fits.
    pub fit: FitRequest,
}

/// Records what every candidate, fitted to the evidence up to snapshot `origin` (an index of at least 1), makes of the dates of
/// the snapshots that follow.
///
/// Candidates are fitted to the newest period; where that shows no growth, to a few periods before it. Without any, the
/// record has trends only.
///
/// # Errors
/// Cancellation; an `origin` without a snapshot before it.
pub fn record(
    evidence: &Evidence,
    origin: usize,
    plan: &RecordPlan,
    cancelled: &dyn Fn() -> bool,
) -> Result<OriginRecord, OriginError> {
    let known = evidence.window(origin, evidence.snapshots().len());
    let scene = Scene::new(&known, &plan.fit, cancelled)?;
    let mut targets = Vec::new();
    for (i, then) in evidence.snapshots().iter().skip(origin + 1).take(plan.ahead).enumerate() {
        let (date, ahead) = (then.as_of, (i + 1) as f64);
        let totals = (then.counts.nodes() as f64, then.counts.link_ends() as f64);
        targets.push(Target { date, ahead, growth: Growth::Known, totals, rates: None });
        if plan.expected {
            targets.extend(scene.expected(date, ahead));
        }
    }
    scene.record(&plan.thresholds, targets)
}

/// An origin with its candidates fitted.
pub(super) struct Scene<'a> {
    known: &'a Evidence,
    before: &'a Snapshot,
    now: &'a Snapshot,
    fitted: Vec<Mechanism>,
    cancelled: &'a dyn Fn() -> bool,
}

impl<'a> Scene<'a> {
    /// The origin at the newest snapshot of `known`.
    pub fn new(
        known: &'a Evidence,
        request: &FitRequest,
        cancelled: &'a dyn Fn() -> bool,
    ) -> Result<Self, OriginError> {
        let [.., before, now] = known.snapshots() else { return Err(OriginError::NoPeriod) };
        let request = FitRequest { links_per_arrival: None, ..request.clone() };
        let newest = known.snapshots().len() - 1;
        let mut fitted = Vec::new();
        for depth in [2, OLDER_SNAPSHOTS] {
            match mechanisms(&known.window(newest, depth), &request, cancelled) {
                Ok(found) => {
                    fitted = found;
                    break;
                }
                Err(FitError::Cancelled) => return Err(FitError::Cancelled.into()),
                Err(_) => {}
            }
        }
        Ok(Self { known, before, now, fitted, cancelled })
    }

    /// Targets at `date` by the arrivals and links that are to be expected at the origin; none where nothing can be.
    pub fn expected(&self, date: Timestamp, ahead: f64) -> Vec<Target> {
        self.targets(date, ahead, &GivenRates::default())
    }

    /// The same with the rates that are given.
    pub fn targets(&self, date: Timestamp, ahead: f64, given: &GivenRates) -> Vec<Target> {
        let Some(mix) = self.mix() else { return Vec::new() };
        let days = days_between(self.now.as_of, date);
        let planned = given.arrivals.is_some();
        let target = |(growth, rates): (Growth, Rates)| {
            let totals = self.totals(&rates, days)?;
            // Of rates that are only expected, what they add up to is all that matters, and constant ones cost less.
            Some(Target { date, ahead, growth, totals, rates: planned.then_some(rates) })
        };
        expected_rates(self.known, &mix.forces, days, given).into_iter().filter_map(target).collect()
    }

    fn mix(&self) -> Option<&Mechanism> {
        self.fitted.iter().find(|mechanism| mechanism.model == Model::Mix)
    }

    fn totals(&self, rates: &Rates, days: f64) -> Option<(f64, f64)> {
        let course = Course::new(&self.now.counts, rates.drive(&self.mix()?.forces)?, days).ok()?;
        Some((course.nodes(days), course.link_ends(days)))
    }

    /// The same with those candidates only that `wanted` has; the plain mix stays, for chance is told by it.
    pub fn keep(&mut self, wanted: impl Fn(Model) -> bool) {
        self.fitted.retain(|mechanism| mechanism.model == Model::Mix || wanted(mechanism.model));
    }

    /// What every candidate makes of `targets`.
    pub fn record(&self, thresholds: &[u64], targets: Vec<Target>) -> Result<OriginRecord, OriginError> {
        let (before, now) = (self.before, self.now);
        let size = |snapshot: &Snapshot, threshold| snapshot.counts.tail_size(threshold) as f64;
        let totals = |snapshot: &Snapshot| Totals {
            day: days_between(now.as_of, snapshot.as_of),
            nodes: snapshot.counts.nodes() as f64,
            link_ends: snapshot.counts.link_ends() as f64,
        };
        let reached = (now.counts.nodes() as f64, now.counts.link_ends() as f64);
        let hindsight = self.fitted.iter().map(|mechanism| {
            let days = days_between(before.as_of, now.as_of);
            let forces = leading_to(&mechanism.forces, before, days, reached);
            self.law_sizes(before, forces, days, thresholds)
        });
        let hindsight = hindsight.collect::<Result<_, _>>()?;
        let mut outlooks = Vec::new();
        for target in targets {
            let only_mix = matches!(target.growth, Growth::Low(_) | Growth::High(_));
            let days = days_between(now.as_of, target.date);
            let laws = self.fitted.iter().map(|mechanism| {
                if only_mix && mechanism.model != Model::Mix {
                    return Ok(None);
                }
                let forces = match &target.rates {
                    Some(rates) => rates.drive(&mechanism.forces),
                    None => leading_to(&mechanism.forces, now, days, target.totals),
                };
                if only_mix {
                    return self.sides(forces, days, thresholds);
                }
                self.law_sizes(now, forces, days, thresholds)
            });
            let laws = laws.collect::<Result<_, _>>()?;
            outlooks.push(Outlook { target, laws });
        }
        Ok(OriginRecord {
            as_of: now.as_of,
            thresholds: thresholds.to_vec(),
            totals: (totals(before), totals(now)),
            sizes: thresholds.iter().map(|&j| (size(before, j), size(now, j))).collect(),
            lossless: !self.fitted.iter().any(|mechanism| mechanism.forces.has_losses()),
            models: self.fitted.iter().map(|mechanism| mechanism.model).collect(),
            hindsight,
            outlooks,
        })
    }

    /// The tails by rates at one standard deviation, between every so many thresholds log-linear: they only measure an uncertainty.
    fn sides(
        &self,
        forces: Option<GrowthParameters>,
        days: f64,
        thresholds: &[u64],
    ) -> Result<Option<LawSizes>, OriginError> {
        let step = thresholds.len().div_ceil(MOST_SIDE_THRESHOLDS).max(1);
        let last = thresholds.len().saturating_sub(1);
        let mut places: Vec<usize> = (0..thresholds.len()).step_by(step).collect();
        places.extend((places.last() != Some(&last)).then_some(last));
        let coarse: Vec<u64> = places.iter().filter_map(|&i| thresholds.get(i).copied()).collect();
        let Some(sizes) = self.law_sizes(self.now, forces, days, &coarse)? else { return Ok(None) };
        let logs: Vec<f64> = sizes.mean.iter().map(|mean| mean.max(HALF_A_NODE).ln()).collect();
        let mean = thresholds.iter().enumerate().map(|(i, _)| {
            let (j, within) = (i / step, (i % step) as f64);
            let at = |j: usize| (places.get(j).copied(), logs.get(j).copied());
            match (at(j), at(j + 1)) {
                ((Some(from), Some(low)), (Some(to), Some(high))) => {
                    (low + (high - low) * within / (to - from) as f64).exp()
                }
                ((_, Some(only)), _) => only.exp(),
                _ => 0.0,
            }
        });
        Ok(Some(LawSizes { mean: mean.collect(), ..LawSizes::default() }))
    }

    /// The tails `days` after `from`; none where they cannot be computed.
    fn law_sizes(
        &self,
        from: &Snapshot,
        forces: Option<GrowthParameters>,
        days: f64,
        thresholds: &[u64],
    ) -> Result<Option<LawSizes>, OriginError> {
        if (self.cancelled)() {
            return Err(ForecastError::Cancelled.into());
        }
        let Some(Ok(course)) = forces.map(|forces| Course::new(&from.counts, forces, days)) else { return Ok(None) };
        let Ok(law) = NetworkLaw::at(&course, &from.counts, days) else { return Ok(None) };
        let law = law.until(self.cancelled);
        let mut sizes = LawSizes::default();
        for &threshold in thresholds {
            let sum = match law.rough_tail(threshold) {
                Ok(sum) => sum,
                // A tail that was not waited for is not one that cannot be computed.
                Err(GrowthError::Cancelled) => return Err(ForecastError::Cancelled.into()),
                Err(_) => return Ok(None),
            };
            sizes.mean.push(sum.mean);
            sizes.kept.push(sum.kept);
            sizes.variance.push(sum.variance);
        }
        Ok(Some(sizes))
    }
}

impl OriginRecord {
    /// Every member's forecast of the size of the tail at index `j` of the thresholds, at the date of `outlook`.
    pub fn members(&self, outlook: &Outlook, j: usize) -> Vec<(Member, f64)> {
        let mut found = Vec::new();
        for (i, &model) in self.models.iter().enumerate() {
            let Some((mean, kept)) = at(&outlook.laws, i, j) else { continue };
            found.push((Member::Mechanism(model), mean));
            if let Some(factor) = self.correction(i, j) {
                found.push((Member::Corrected(model), kept + (mean - kept) * factor));
            }
        }
        let Some(&(size_before, size)) = self.sizes.get(j) else { return found };
        let step = Step { before: self.totals.0, now: self.totals.1, size_before, size };
        let (nodes, link_ends) = outlook.target.totals;
        let ahead = Totals { day: days_between(self.as_of, outlook.target.date), nodes, link_ends };
        found.extend(Trend::ALL.into_iter().map(|trend| (Member::Trend(trend), trend.size(&step, &ahead))));
        found
    }

    /// Observed over expected flow past the threshold at index `j` in the newest period, by candidate `i`.
    fn correction(&self, i: usize, j: usize) -> Option<f64> {
        let (mean, kept) = at(&self.hindsight, i, j)?;
        let came = self.sizes.get(j)?.1 - kept;
        let factor = (came.max(0.0) + CORRECTION_DAMPING) / ((mean - kept).max(0.0) + CORRECTION_DAMPING);
        Some(factor.clamp(MOST_CORRECTION.recip(), MOST_CORRECTION))
    }

    /// Nodes past the threshold at index `j` at the start of the newest period that are past it still, by a candidate.
    pub fn kept(&self, model: Model, j: usize) -> Option<f64> {
        let i = self.models.iter().position(|&m| m == model)?;
        Some(at(&self.hindsight, i, j)?.1)
    }

    /// |ln(expected/observed)| of the tail size at index `j` at the origin, by a candidate in hindsight.
    pub fn misfit(&self, model: Model, j: usize) -> Option<f64> {
        let i = self.models.iter().position(|&m| m == model)?;
        let (mean, _) = at(&self.hindsight, i, j)?;
        let observed = self.sizes.get(j)?.1;
        Some((mean.max(HALF_A_NODE) / observed.max(HALF_A_NODE)).ln().abs())
    }
}

/// Mean and kept of candidate `i` at threshold `j`.
fn at(laws: &[Option<LawSizes>], i: usize, j: usize) -> Option<(f64, f64)> {
    let sizes = laws.get(i)?.as_ref()?;
    Some((*sizes.mean.get(j)?, *sizes.kept.get(j)?))
}

/// `forces` with constant arrivals and landings that lead from `from` to `totals` in `days`.
fn leading_to(
    forces: &GrowthParameters,
    from: &Snapshot,
    days: f64,
    (nodes, link_ends): (f64, f64),
) -> Option<GrowthParameters> {
    // dN/dt = A − δN and dK/dt = L + ēA − θK at constant rates, solved for A and L.
    let inflow = |start: f64, end: f64, hazard: f64| {
        let decay = (-hazard * days).exp();
        let elapsed = if hazard > 0.0 { -(-hazard * days).exp_m1() / hazard } else { days };
        (end - start * decay) / elapsed
    };
    let (delta, theta) = (forces.departure_hazard(), forces.end_loss_hazard() + forces.departure_hazard());
    let start = from.counts.nodes() as f64;
    let arrivals = inflow(start, nodes, delta).max(0.0);
    let landing = (inflow(from.counts.link_ends() as f64, link_ends, theta) - arrivals * forces.entry.mean()).max(0.0);
    let plan = ArrivalPlan::constant(arrivals).ok()?;
    let (per_arrival, per_node) = if arrivals * days < FEW_ARRIVALS * start {
        (0.0, landing / (0.5 * (start + nodes)))
    } else {
        (landing / arrivals, 0.0)
    };
    let forces = forces.clone().with_arrivals(plan).with_links_per_arrival(per_arrival).ok()?;
    forces.with_links_per_node_day(per_node).ok()
}

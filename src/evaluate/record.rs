//! One origin's forecasts by every member, for the record: what was known then, carried forward.

use jiff::Timestamp;

use super::OriginError;
use super::member::{HALF_A_NODE, Member, Step, Totals, Trend};
use crate::fit::{FitError, FitRequest, Model, mechanisms};
use crate::forecast::ForecastError;
use crate::growth::{Course, NetworkLaw};
use crate::model::{ArrivalPlan, Evidence, GrowthParameters, Snapshot, days_between};

/// Snapshots of the newest period alone tell today's mix; so many more are looked at when it shows no growth.
const OLDER_SNAPSHOTS: usize = 4;
/// Nodes added to both sides of a correction: flows of a few nodes are chance.
const CORRECTION_DAMPING: f64 = 5.0;
/// A correction lies between a third and three.
const MOST_CORRECTION: f64 = 3.0;
/// With fewer arrivals than this share of the nodes, links are taken to land per node and day: per arrival there would be
/// too many at once.
const FEW_ARRIVALS: f64 = 1e-3;

/// What a target's totals are.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Growth {
    /// Those that came, or are given.
    Known,
    /// Those expected at the origin.
    Expected,
    /// Those at one standard deviation below the expected ones; by the plain mix only.
    Low,
    /// Those at one standard deviation above; by the plain mix only.
    High,
}

/// A date to look ahead to, and the totals then.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Target {
    /// The date.
    pub date: Timestamp,
    /// Periods ahead of the origin.
    pub ahead: f64,
    /// What the totals are.
    pub growth: Growth,
    /// N and K then.
    pub totals: (f64, f64),
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

/// Records what every candidate, fitted to the evidence up to snapshot `origin` (an index ≥ 1), makes of `targets`.
///
/// Candidates are fitted to the newest period; where that shows no growth, to a few periods before it. Without any, the
/// record has trends only.
///
/// # Errors
/// Cancellation; an `origin` without a snapshot before it.
pub fn record(
    evidence: &Evidence,
    origin: usize,
    thresholds: &[u64],
    targets: &[Target],
    request: &FitRequest,
    cancelled: &dyn Fn() -> bool,
) -> Result<OriginRecord, OriginError> {
    let (Some(now), Some(before)) =
        (evidence.snapshots().get(origin), origin.checked_sub(1).and_then(|i| evidence.snapshots().get(i)))
    else {
        return Err(OriginError::NoPeriod);
    };
    let request = FitRequest { links_per_arrival: None, ..request.clone() };
    let mut fitted = Vec::new();
    for depth in [2, OLDER_SNAPSHOTS] {
        match mechanisms(&evidence.window(origin, depth), &request, cancelled) {
            Ok(found) => {
                fitted = found;
                break;
            }
            Err(FitError::Cancelled) => return Err(FitError::Cancelled.into()),
            Err(_) => {}
        }
    }
    let look = |from: &Snapshot, forces: &GrowthParameters, to: Timestamp, totals| {
        if cancelled() {
            return Err(OriginError::Forecast(ForecastError::Cancelled));
        }
        Ok(law_sizes(from, forces, days_between(from.as_of, to), totals, thresholds))
    };
    let (nodes, ends) = (now.counts.nodes() as f64, now.counts.link_ends() as f64);
    let hindsight = fitted.iter().map(|m| look(before, &m.forces, now.as_of, (nodes, ends)));
    let hindsight = hindsight.collect::<Result<_, _>>()?;
    let mut outlooks = Vec::new();
    for &target in targets {
        let only_mix = matches!(target.growth, Growth::Low | Growth::High);
        let laws = fitted.iter().map(|m| match m.model {
            Model::Mix => look(now, &m.forces, target.date, target.totals),
            _ if only_mix => Ok(None),
            _ => look(now, &m.forces, target.date, target.totals),
        });
        let laws = laws.collect::<Result<_, _>>()?;
        outlooks.push(Outlook { target, laws });
    }
    let size = |snapshot: &Snapshot, threshold| snapshot.counts.tail_size(threshold) as f64;
    let totals = |snapshot: &Snapshot| Totals {
        day: days_between(now.as_of, snapshot.as_of),
        nodes: snapshot.counts.nodes() as f64,
        link_ends: snapshot.counts.link_ends() as f64,
    };
    Ok(OriginRecord {
        as_of: now.as_of,
        thresholds: thresholds.to_vec(),
        totals: (totals(before), totals(now)),
        sizes: thresholds.iter().map(|&j| (size(before, j), size(now, j))).collect(),
        lossless: !fitted.iter().any(|mechanism| mechanism.forces.has_losses()),
        models: fitted.iter().map(|mechanism| mechanism.model).collect(),
        hindsight,
        outlooks,
    })
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

/// The tails after `days` from `from` by `forces`, their rates such that the totals become `totals`.
fn law_sizes(
    from: &Snapshot,
    forces: &GrowthParameters,
    days: f64,
    totals: (f64, f64),
    thresholds: &[u64],
) -> Option<LawSizes> {
    let forces = leading_to(forces, from, days, totals)?;
    let course = Course::new(&from.counts, forces, days).ok()?;
    let law = NetworkLaw::at(&course, &from.counts, days).ok()?;
    let mut sizes = LawSizes::default();
    for &threshold in thresholds {
        let sum = law.rough_tail(threshold).ok()?;
        sizes.mean.push(sum.mean);
        sizes.kept.push(sum.kept);
        sizes.variance.push(sum.variance);
    }
    Some(sizes)
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

//! Transitions: every force that moves single nodes, by likelihood.

mod birth_death;
mod entry;
mod likelihood;
mod node_pmf;
mod renames;

use super::profile::{AGE_WEIGHT, ESTIMATE_LEVEL, NORMAL_95, weigh};
use super::{Candidate, FitError, Fixed, Force, Model, OutlierClass, Outliers, PeriodRates, TransitionSummary};
use crate::model::{
    DegreeKind, EntryDegrees, Estimate, Evidence, Interval, MAX_DORMANT_SHARE, MAX_GROWTH_VARIANCE,
    MAX_KERNEL_EXPONENT, Transitions, Warning,
};
use crate::numerics::elementary::logistic;
use crate::numerics::intervals::binomial_share;
use likelihood::{Change, Panel, PanelFit};

/// Periods read at most, the newest ones.
const MOST_PERIODS: usize = 6;
/// Fewer nodes present at both dates than this tell next to nothing.
const FEWEST_NODES: u64 = 50;

/// One candidate's fit of all periods.
pub(super) struct CandidateFit {
    pub model: Model,
    pub preferential_share: Force,
    /// The dormant share, growth variance or kernel exponent, for the candidate that has one.
    pub own: Option<Force>,
    pub log_likelihood: f64,
    pub parameters: usize,
}

/// What transitions tell.
pub(super) struct TransitionFit {
    /// Departure hazard, 1/day.
    pub departures: Force,
    /// Loss hazard of a link, 1/day; none when no node's degree fell.
    pub link_losses: Option<Force>,
    /// Degrees of newcomers on arrival; none when nobody arrived.
    pub entry: Option<EntryDegrees>,
    pub summary: TransitionSummary,
    pub candidates: Vec<CandidateFit>,
    pub warnings: Vec<Warning>,
}

/// The candidates with their AIC weights.
fn weighed(fits: &[CandidateFit]) -> Vec<Candidate> {
    let row = |fit: &CandidateFit| Candidate {
        model: fit.model,
        preferential_share: fit.preferential_share.value(),
        parameter: fit.own.map(|own| own.value()),
        log_likelihood: fit.log_likelihood,
        aic: 2.0 * fit.parameters as f64 - 2.0 * fit.log_likelihood,
        weight: 0.0,
    };
    let mut rows: Vec<Candidate> = fits.iter().map(row).collect();
    weigh(&mut rows);
    rows
}

/// One period as it is read.
struct Read<'a> {
    table: &'a Transitions,
    panel: Panel,
    renamed: Vec<(u64, u64)>,
    weight: f64,
}

/// Fits every candidate asked for to the newest periods of `evidence`; a parameter that is given in `fixed` is held there.
///
/// Formula: nodes present at both dates by `Π [(1−ε)·P(k → k') + ε·h(k')]^n`, P the law of one node at constant rates and h a
/// broad law for outliers; departures binomial; entry degrees by taking the growth since arrival off the newcomers'. Periods
/// are fitted one by one and pooled, newer ones weighing more; what they scatter beyond their own errors (DerSimonian & Laird
/// 1986) goes into the forecast.
///
/// # Errors
/// Too few nodes; cancellation; a search that reached its cap.
pub(super) fn fit_transitions(
    evidence: &Evidence,
    models: &[Model],
    fixed: Fixed,
    cancelled: &dyn Fn() -> bool,
) -> Result<TransitionFit, FitError> {
    let tables = evidence.transitions();
    let newest = &tables[tables.len().saturating_sub(MOST_PERIODS)..];
    let mut periods: Vec<Read> = newest.iter().filter_map(Read::new).collect();
    for (age, period) in periods.iter_mut().rev().enumerate() {
        period.weight = AGE_WEIGHT.powi(age as i32);
    }
    let stayed: u64 = periods.iter().map(|period| period.table.stayed()).sum();
    if stayed < FEWEST_NODES {
        let detail = format!(
            "the transitions have {stayed} nodes present at both dates; with fewer than {FEWEST_NODES} they tell no force: \
             give transitions of more nodes, or leave them out"
        );
        return Err(FitError::NotIdentified { detail });
    }
    let (mut found, mut warnings): (Vec<(Model, Vec<PanelFit>)>, _) = (Vec::new(), Vec::new());
    let mut near: Vec<PanelFit> = Vec::new();
    // The mix is where the search for every other candidate begins.
    for &model in std::iter::once(&Model::Mix).chain(models.iter().filter(|&&model| model != Model::Mix)) {
        let mut fits = Vec::new();
        for (i, period) in periods.iter().enumerate() {
            fits.push(period.panel.fit(model, fixed.own(model), near.get(i), cancelled)?);
        }
        if let Some(stuck) = fits.iter().position(|fit| !fit.converged) {
            let detail =
                format!("the {} candidate on the transitions from {}", model.name(), periods[stuck].table.from());
            if models == [model] {
                return Err(FitError::NotConverged { detail });
            }
            let detail = format!("{detail} found no maximum of its likelihood and is left out");
            warnings.push(Warning::new("candidate_left_out", detail));
        } else {
            found.push((model, fits.clone()));
        }
        if near.is_empty() {
            near = fits;
        }
    }
    let aic = |fits: &[PanelFit]| fits.iter().map(|fit| fit.parameters as f64 - fit.log_likelihood).sum::<f64>();
    let Some((_, best)) = found.iter().min_by(|a, b| aic(&a.1).total_cmp(&aic(&b.1))) else {
        return Err(FitError::NotConverged { detail: "no candidate found a maximum on the transitions".into() });
    };
    let (last, fit) = (&periods[periods.len() - 1], &best[best.len() - 1]);
    warnings.extend(misfit(last, fit));
    let candidates: Vec<CandidateFit> = found.iter().map(|(model, fits)| candidate(*model, &periods, fits)).collect();
    Ok(TransitionFit {
        departures: departures(&periods),
        link_losses: link_losses(&periods, best, evidence.kind()),
        entry: last.entry(fit),
        summary: TransitionSummary {
            periods: periods.iter().zip(best).map(|(period, fit)| period.rates(fit)).collect(),
            outliers: outliers(&periods, best),
            candidates: weighed(&candidates),
        },
        warnings,
        candidates,
    })
}

impl<'a> Read<'a> {
    /// None when there is nobody at either date.
    fn new(table: &'a Transitions) -> Option<Self> {
        let (before, after) = (table.counts_before()?, table.counts_after()?);
        let renamed = renames::renamed(table, before.mean_degree());
        let rows: Vec<(u64, u64, u64)> = table.stays().collect();
        let arrived = (table.arrived() as f64 - renamed.len() as f64).max(0.0);
        let turnover = arrived / likelihood::log_mean(before.nodes() as f64, after.nodes() as f64);
        Some(Self { table, panel: Panel::new(&rows, before, after, turnover), renamed, weight: 1.0 })
    }

    /// (departed, present), nodes under a new name taken as staying.
    fn departed(&self) -> (u64, u64) {
        let renamed = self.renamed.len() as u64;
        let departed = self.table.departed().saturating_sub(renamed);
        (departed, self.table.stayed() + departed + renamed)
    }

    fn rates(&self, fit: &PanelFit) -> PeriodRates {
        let (uniform, preferential) = self.panel.landed(fit);
        let landed = uniform + preferential;
        let without_links = self.table.stays().filter(|&(before, _, _)| before == 0);
        let (unlinked, gained) = without_links
            .fold((0_u64, 0_u128), |(n, g), (_, after, nodes)| (n + nodes, g + u128::from(after) * u128::from(nodes)));
        let (departed, present) = (self.table.departed(), self.table.departed() + self.table.stayed());
        PeriodRates {
            from: self.table.from(),
            to: self.table.to(),
            departure_share: departed as f64 / present as f64,
            uniform_gain: fit.uniform,
            first_gain: (unlinked > 0).then(|| gained as f64 / unlinked as f64),
            gain_per_link: fit.preferential,
            loss_per_link: fit.loss,
            landed_per_day: landed / self.table.days(),
        }
    }

    fn entry(&self, fit: &PanelFit) -> Option<EntryDegrees> {
        let mut newcomers: std::collections::BTreeMap<u64, u64> = self.table.newcomers().collect();
        for (_, after) in &self.renamed {
            if let Some(nodes) = newcomers.get_mut(after) {
                *nodes = nodes.saturating_sub(1);
            }
        }
        let newcomers: Vec<(u64, u64)> = newcomers.into_iter().filter(|&(_, nodes)| nodes > 0).collect();
        entry::entry_degrees(&newcomers, self.panel.newcomer_law(fit))
    }
}

/// Departure hazard: −ln(1 − departed/present)/days, its interval that of a binomial share (Clopper & Pearson 1934).
fn departures(periods: &[Read]) -> Force {
    let hazard = |share: f64, days: f64| -(-share.min(1.0 - 1e-9)).ln_1p() / days;
    let rows = periods.iter().map(|period| {
        let (departed, present) = period.departed();
        (departed, present, period.table.days(), period.weight)
    });
    let rows: Vec<(u64, u64, f64, f64)> = rows.collect();
    let total: u64 = rows.iter().map(|row| row.0).sum();
    if total == 0 {
        // Nobody left: the interval still says how few could have gone unseen.
        let exposure: f64 = rows.iter().map(|&(_, present, days, _)| present as f64 * days).sum();
        let high = -((1.0 - ESTIMATE_LEVEL) / 2.0).ln() / exposure;
        let interval = Interval { level: ESTIMATE_LEVEL, low: 0.0, high };
        return Force { estimate: Estimate { value: 0.0, interval: Some(interval) }, excursion: (0.0, 0.0) };
    }
    let logs: Vec<(f64, f64, f64)> = rows
        .iter()
        .filter(|row| row.0 > 0)
        .map(|&(departed, present, days, weight)| {
            let share = departed as f64 / present as f64;
            let error = ((1.0 - share) / departed as f64).sqrt();
            (hazard(share, days).ln(), error, weight)
        })
        .collect();
    let mut force = pooled(&logs, f64::exp);
    if let [(departed, present, days, _)] = rows[..] {
        let (low, high) = binomial_share(departed as f64, present as f64, ESTIMATE_LEVEL);
        let interval = Interval { level: ESTIMATE_LEVEL, low: hazard(low, days), high: hazard(high, days) };
        force.estimate.interval = Some(interval);
    }
    force
}

/// Loss hazard of a link's own. In the total convention ends also go with the departing partner, which transitions see as a
/// loss like any other.
fn link_losses(periods: &[Read], fits: &[PanelFit], kind: DegreeKind) -> Option<Force> {
    let rows: Vec<(f64, f64, f64)> = periods
        .iter()
        .zip(fits)
        .filter(|(_, fit)| fit.loss > 0.0)
        .filter_map(|(period, fit)| {
            let partner = match kind {
                DegreeKind::Received => 0.0,
                DegreeKind::Total => departures(std::slice::from_ref(period)).estimate.value,
            };
            let own = fit.loss / period.table.days() - partner;
            (own > 0.0).then(|| (own.ln(), fit.errors.log_loss * fit.loss / (own * period.table.days()), period.weight))
        })
        .collect();
    (!rows.is_empty()).then(|| pooled(&rows, f64::exp))
}

fn candidate(model: Model, periods: &[Read], fits: &[PanelFit]) -> CandidateFit {
    let preferential_share = match model {
        Model::Uniform => Force::given(0.0),
        Model::Preferential => Force::given(1.0),
        _ => {
            let odds = periods.iter().zip(fits).map(|(period, fit)| {
                let (uniform, preferential) = period.panel.landed(fit);
                ((preferential / uniform).ln(), fit.errors.log_odds, period.weight)
            });
            pooled(&odds.collect::<Vec<_>>(), logistic)
        }
    };
    let own = |value: fn(&PanelFit) -> f64, back: fn(f64) -> f64| {
        let rows = periods.iter().zip(fits).map(|(period, fit)| (value(fit), fit.errors.own, period.weight));
        pooled(&rows.collect::<Vec<_>>(), back)
    };
    CandidateFit {
        model,
        preferential_share,
        own: match model {
            Model::Dormancy => Some(own(
                |fit| (fit.dormant_share / (1.0 - fit.dormant_share)).ln(),
                |x| logistic(x).min(MAX_DORMANT_SHARE),
            )),
            Model::GrowthVariance => Some(own(|fit| fit.growth_variance.ln(), |x| x.exp().min(MAX_GROWTH_VARIANCE))),
            Model::Power => Some(own(|fit| fit.exponent, |x| x.clamp(0.0, MAX_KERNEL_EXPONENT))),
            _ => None,
        },
        log_likelihood: fits.iter().map(|fit| fit.log_likelihood).sum(),
        parameters: fits.iter().map(|fit| fit.parameters).sum(),
    }
}

/// Pools (value, standard error, age weight) on the scale where values are near normal; `back` leads to the natural scale.
fn pooled(rows: &[(f64, f64, f64)], back: fn(f64) -> f64) -> Force {
    let inverse = |error: f64| error.max(1e-9).powi(-2);
    let sum = |f: &dyn Fn(&(f64, f64, f64)) -> f64| rows.iter().map(f).sum::<f64>();
    let total = sum(&|r| inverse(r.1));
    let mean = sum(&|r| inverse(r.1) * r.0) / total;
    let scatter = sum(&|r| inverse(r.1) * (r.0 - mean).powi(2));
    let freedom = rows.len() as f64 - 1.0;
    let between =
        ((scatter - freedom) / (total - sum(&|r| inverse(r.1).powi(2)) / total).max(f64::MIN_POSITIVE)).max(0.0);
    let between = if rows.len() < 2 { 0.0 } else { between };
    let weight = |r: &(f64, f64, f64)| r.2 / (r.1.max(1e-9).powi(2) + between);
    let total = sum(&weight);
    let value = sum(&|r| weight(r) * r.0) / total;
    let variance = sum(&|r| weight(r).powi(2) * (r.1.powi(2) + between)) / (total * total);
    let reach = NORMAL_95 * variance.sqrt();
    let interval = Interval { level: ESTIMATE_LEVEL, low: back(value - reach), high: back(value + reach) };
    let deviation = (variance + between).sqrt();
    Force {
        estimate: Estimate { value: back(value), interval: Some(interval) },
        excursion: (back(value - deviation), back(value + deviation)),
    }
}

/// A warning when even the likeliest candidate misses how some class of nodes changed, in the newest period.
fn misfit(period: &Read, fit: &PanelFit) -> Option<Warning> {
    /// Standard errors, and links a node, by which a class must be off to be worth a warning.
    const BEYOND_CHANCE: f64 = 4.0;
    const WORTH_A_WARNING: f64 = 0.25;
    let changes = period.panel.changes(fit);
    let off = |c: &Change| (c.observed - c.expected) / c.variance.max(1.0).sqrt();
    let far = |c: &&Change| {
        let scale = c.observed.abs().max(c.expected.abs());
        off(c).abs() > BEYOND_CHANCE && (c.observed - c.expected).abs() > WORTH_A_WARNING * scale
    };
    let worst = changes.iter().filter(far).max_by(|a, b| off(a).abs().total_cmp(&off(b).abs()))?;
    let detail = format!(
        "no candidate reproduces how degrees changed from {} to {}: nodes with {} to {} links moved by {:+.3} links on average, \
         outliers aside, where the likeliest candidate has {:+.3}; something besides degree decides who gains or loses there",
        period.table.from(),
        period.table.to(),
        worst.lowest,
        (2 * worst.lowest).saturating_sub(1),
        worst.observed / worst.nodes,
        worst.expected / worst.nodes
    );
    Some(Warning::new("transitions_misfit", detail))
}

/// What was set aside, by class of degree before: single degrees 0 and 1, then doubling.
fn outliers(periods: &[Read], fits: &[PanelFit]) -> Outliers {
    let mut classes: Vec<OutlierClass> = Vec::new();
    let mut jumps: Vec<(u64, u64, u64)> = Vec::new();
    for (period, fit) in periods.iter().zip(fits) {
        jumps.extend(period.panel.outliers(fit));
    }
    for &(before, _, nodes) in &jumps {
        let lowest = if before == 0 { 0 } else { 1 << before.ilog2() };
        match classes.iter_mut().find(|class| class.lowest == lowest) {
            Some(class) => class.nodes += nodes,
            None => classes.push(OutlierClass { lowest, highest: (2 * lowest).saturating_sub(1), nodes }),
        }
    }
    classes.sort_by_key(|class| class.lowest);
    jumps.sort_by_key(|&(before, after, _)| std::cmp::Reverse(before.abs_diff(after)));
    let renamed: Vec<(u64, u64)> = periods.iter().flat_map(|period| period.renamed.iter().copied()).collect();
    Outliers { nodes: jumps.iter().map(|jump| jump.2).sum(), classes, jumps, renamed }
}

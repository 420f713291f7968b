//! Arrivals and links per arrival ahead, from what the totals of past snapshots show.

use super::rates::{RateHistory, RateOutlook, RatePeriod};
use crate::model::{ArrivalPlan, ArrivalSegment, Evidence, GrowthParameters, Snapshot};
use crate::numerics::elementary::exp_m1_ratio;

/// First edges of a plan's segments, in typical periods; later ones grow by half.
const FIRST_EDGES: [f64; 3] = [0.25, 0.5, 1.0];
const LATER_EDGE: f64 = 1.5;
const EDGE_GROWTH: f64 = 1.5;
/// Segments of a plan at most: the last edge is then 10⁹ periods away.
const MOST_SEGMENTS: usize = 64;
/// Rates that differ by less than this, relative, are one segment: each costs a panel of every node's law.
const SAME_RATE: f64 = 0.02;

/// Arrivals ahead.
#[derive(Debug, Clone, PartialEq)]
pub struct ArrivalForecast {
    /// What is expected.
    pub central: ArrivalPlan,
    /// One standard deviation below: of the arrivals up to each day, so that it serves as the end of an excursion.
    pub low: ArrivalPlan,
    /// One standard deviation above.
    pub high: ArrivalPlan,
    /// How it was made, in words, with its figures.
    pub detail: String,
}

/// Forecasts arrivals for `horizon` days after the newest snapshot from the numbers of nodes, where nodes depart with hazard
/// `departures` (1/day); [`RateHistory`] has the method. `None` for a single snapshot.
///
/// Low and high widen with the horizon. Beyond it the last segments go on.
pub fn forecast_arrivals(evidence: &Evidence, departures: f64, horizon: f64) -> Option<ArrivalForecast> {
    let history = arrival_periods(evidence, departures);
    let fell = history.iter().filter(|period| period.events == 0.0).count();
    let rates = RateHistory::new(&history)?;
    let plan = |side: f64| path(&rates, horizon, side);
    let ahead = rates.mean_over(horizon);
    let mut detail = format!(
        "arrivals are forecast from the numbers of nodes in {} period(s): {} a day in the newest, {} a day expected over the next \
         {:.0} days ({} to {} at one standard deviation), by a level that moves from period to period with a damped trend",
        rates.periods(),
        figures(rates.newest_rate()),
        figures(ahead.rate),
        horizon.max(0.0),
        figures(ahead.rate * (-ahead.log_deviation).exp()),
        figures(ahead.rate * ahead.log_deviation.exp()),
    );
    if rates.periods() == 1 {
        detail.push_str("; one period cannot show how arrivals vary, so a stated default is assumed");
    }
    if fell > 0 {
        detail.push_str(&format!("; {fell} period(s) show no arrivals"));
    }
    Some(ArrivalForecast { central: plan(0.0)?, low: plan(-1.0)?, high: plan(1.0)?, detail })
}

/// Forecasts the mean of ℓ, links that land on present nodes per arrival, over `horizon` days after the newest snapshot; losses,
/// departures, entry degrees and links per node and day are those of `forces`. `None` where no period has arrivals, and where
/// there are transitions: those tell what landed better than totals, from which one departing hub may take more than all that came.
pub fn forecast_links_per_arrival(evidence: &Evidence, forces: &GrowthParameters, horizon: f64) -> Option<RateOutlook> {
    if !evidence.transitions().is_empty() {
        return None;
    }
    RateHistory::new(&link_periods(evidence, forces)).map(|history| history.mean_over(horizon))
}

/// Arrivals of each period between snapshots, oldest first; exposure in days. Where nodes fell by more than departures explain,
/// none arrived.
///
/// Formula: dN/dt = A − δN with constant A, so A·T = (N₁ − N₀·e^{−δT})·δT/(1 − e^{−δT}).
pub fn arrival_periods(evidence: &Evidence, departures: f64) -> Vec<RatePeriod> {
    let period = |(before, after, days): (&Snapshot, &Snapshot, f64)| {
        let events = inflow(before.counts.nodes() as f64, after.counts.nodes() as f64, departures * days).max(0.0);
        RatePeriod { days, events, exposure: days }
    };
    evidence.periods().map(period).collect()
}

/// Links landed on present nodes in each period, oldest first; exposure in arrivals.
///
/// Formula: as for arrivals, of dK/dt = ℓA + ιN + ēA − (end losses + δ)·K.
pub fn link_periods(evidence: &Evidence, forces: &GrowthParameters) -> Vec<RatePeriod> {
    let arrivals = arrival_periods(evidence, forces.departure_hazard());
    let landed = evidence.periods().zip(arrivals).map(|((before, after, days), arrived)| {
        let (k0, k1) = (before.counts.link_ends() as f64, after.counts.link_ends() as f64);
        let nodes = 0.5 * (before.counts.nodes() as f64 + after.counts.nodes() as f64);
        // A departing node takes its own ends along, besides what each end may lose.
        let hazard = forces.end_loss_hazard() + forces.departure_hazard();
        let gained = inflow(k0, k1, hazard * days);
        let others = forces.entry.mean() * arrived.events + forces.links_per_node_day() * nodes * days;
        RatePeriod { days, events: (gained - others).max(0.0), exposure: arrived.events }
    });
    landed.collect()
}

/// What came in, where `lost` = hazard × time.
fn inflow(before: f64, after: f64, lost: f64) -> f64 {
    (after - before * (-lost).exp()) / exp_m1_ratio(-lost)
}

/// A plan whose arrivals up to each edge are the middle value, or `side` standard deviations from it.
fn path(rates: &RateHistory, horizon: f64, side: f64) -> Option<ArrivalPlan> {
    let mut segments: Vec<ArrivalSegment> = Vec::new();
    let (mut from_day, mut arrived) = (0.0, 0.0);
    for to in edges(rates.period_days(), horizon) {
        let outlook = rates.mean_over(to);
        let upto = to * outlook.rate * (side * outlook.log_deviation).exp();
        let per_day = ((upto - arrived) / (to - from_day)).clamp(0.0, ArrivalPlan::MAX_PER_DAY);
        let differs = |last: &ArrivalSegment| (per_day / last.per_day - 1.0).abs() > SAME_RATE;
        match segments.last() {
            // What is put right by the next segment that differs.
            Some(last) if !differs(last) => arrived += last.per_day * (to - from_day),
            _ => {
                segments.push(ArrivalSegment { from_day, per_day, growth_per_year: 0.0 });
                arrived = upto;
            }
        }
        from_day = to;
    }
    ArrivalPlan::from_segments(&segments).ok()
}

/// Ends of a plan's segments, days, ascending, the last at the horizon; one period where there is none.
fn edges(period: f64, horizon: f64) -> Vec<f64> {
    let later = std::iter::successors(Some(LATER_EDGE), |edge| Some(edge * EDGE_GROWTH));
    let all = FIRST_EDGES.iter().copied().chain(later).map(|edge| edge * period);
    let mut edges: Vec<f64> = all.take_while(|&edge| edge < horizon).take(MOST_SEGMENTS).collect();
    if horizon > 0.0 && horizon.is_finite() || edges.is_empty() {
        edges.push(if horizon > 0.0 { horizon } else { period });
    }
    edges
}

/// A rate in words, with three digits.
pub(super) fn figures(rate: f64) -> String {
    if rate >= 100.0 {
        return format!("{rate:.0}");
    }
    let digits = if rate > 0.0 { (2.0 - rate.log10().floor()).clamp(0.0, 6.0) as usize } else { 0 };
    format!("{rate:.digits$}")
}

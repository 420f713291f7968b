//! Scores of past forecasts in tables: by horizon, by threshold, by member.

use super::backtest::Case;
use super::member::Member;
use super::pool::FEWEST_NODES;
use super::record::Growth;
use super::scores::{Coverage, absolute_error, crps, log_error};

/// Which cases a table is of.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Judged {
    /// Forecasts given the arrivals and links that came: judges the mechanism.
    Mechanism,
    /// Forecasts by the arrivals and links expected at the origin: judges the whole.
    Whole,
}

/// Mean errors of one way to forecast.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Errors {
    /// Mean |ln(forecast/observed)|.
    pub log_error: f64,
    /// Mean |forecast − observed|, nodes.
    pub absolute_error: f64,
}

/// The scores of some cases.
#[derive(Debug, Clone, PartialEq)]
pub struct Scores {
    /// Cases, those with at least 5 nodes observed.
    pub cases: u64,
    /// Errors of the pooled forecast.
    pub pooled: Errors,
    /// Mean CRPS of the pooled forecast, nodes.
    pub crps: f64,
    /// Outcomes inside the intervals, one entry a level.
    pub coverage: Vec<(f64, Coverage)>,
    /// Errors of every member that has a forecast of every case.
    pub members: Vec<(Member, Errors)>,
    /// The plain trend with the least mean log error.
    pub best_trend: Option<Member>,
    /// 1 − log error over that of the best trend: above 0, the pool is the better.
    pub skill: Option<f64>,
    /// 1 − CRPS over the least mean absolute error of a plain trend, which is the CRPS of a plain number.
    pub crps_skill: Option<f64>,
}

/// A row of a table.
#[derive(Debug, Clone, PartialEq)]
pub struct ScoreRow {
    /// Periods ahead.
    pub ahead: u32,
    /// The threshold; none for all of them together.
    pub threshold: Option<u64>,
    /// The scores.
    pub scores: Scores,
}

/// Tables `cases` by horizon, all thresholds together and one by one.
pub fn score_table(cases: &[Case], judged: Judged, levels: &[f64]) -> Vec<ScoreRow> {
    let growth = match judged {
        Judged::Mechanism => Growth::Known,
        Judged::Whole => Growth::Expected,
    };
    let due: Vec<&Case> = cases.iter().filter(|c| c.growth == growth && c.observed >= FEWEST_NODES).collect();
    let mut horizons: Vec<u32> = due.iter().map(|case| case.ahead).collect();
    horizons.sort_unstable();
    horizons.dedup();
    let mut rows = Vec::new();
    for ahead in horizons {
        let at: Vec<&Case> = due.iter().copied().filter(|case| case.ahead == ahead).collect();
        let mut thresholds: Vec<u64> = at.iter().map(|case| case.threshold).collect();
        thresholds.sort_unstable();
        thresholds.dedup();
        rows.push(ScoreRow { ahead, threshold: None, scores: scores(&at, levels) });
        for threshold in thresholds {
            let of: Vec<&Case> = at.iter().copied().filter(|case| case.threshold == threshold).collect();
            rows.push(ScoreRow { ahead, threshold: Some(threshold), scores: scores(&of, levels) });
        }
    }
    rows
}

/// The scores of `cases`; of none, zeros.
fn scores(cases: &[&Case], levels: &[f64]) -> Scores {
    let count = cases.len().max(1) as f64;
    let mean = |value: &dyn Fn(&Case) -> f64| cases.iter().map(|case| value(case)).sum::<f64>() / count;
    let errors = |forecast: &dyn Fn(&Case) -> f64| Errors {
        log_error: mean(&|case| log_error(forecast(case), case.observed).abs()),
        absolute_error: mean(&|case| absolute_error(forecast(case), case.observed)),
    };
    let of = |case: &Case, member| case.members.iter().find(|(own, _)| *own == member).map(|&(_, size)| size);
    let complete = |member: &Member| cases.iter().all(|case| of(case, *member).is_some());
    let members =
        Member::all().filter(complete).map(|member| (member, errors(&|case| of(case, member).unwrap_or(0.0))));
    let members: Vec<(Member, Errors)> = members.collect();
    let trends = || members.iter().filter(|(member, _)| matches!(member, Member::Trend(_)));
    let best = trends().min_by(|a, b| a.1.log_error.total_cmp(&b.1.log_error));
    let nearest = trends().map(|(_, errors)| errors.absolute_error).min_by(f64::total_cmp);
    let (pooled, crps) = (errors(&|case| case.pooled), mean(&|case| crps(&case.law, case.observed)));
    let skill = |own: f64, other: f64| (other > 0.0).then(|| 1.0 - own / other);
    let mut coverage: Vec<(f64, Coverage)> = levels.iter().map(|&level| (level, Coverage::default())).collect();
    for case in cases {
        for ((_, coverage), interval) in coverage.iter_mut().zip(case.law.intervals(levels)) {
            coverage.count(&interval, case.observed);
        }
    }
    Scores {
        cases: cases.len() as u64,
        best_trend: best.map(|(member, _)| *member),
        skill: best.and_then(|(_, errors)| skill(pooled.log_error, errors.log_error)),
        crps_skill: nearest.and_then(|nearest| skill(crps, nearest)),
        pooled,
        crps,
        coverage,
        members,
    }
}

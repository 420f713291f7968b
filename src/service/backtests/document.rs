//! A backtest as it is kept and answered.

use jiff::Timestamp;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use super::{BacktestRequest, words};
use crate::evaluate::{
    Coverage, Errors, Growth, Judged, Member, OriginRecord, PoolUse, Replay, ScoreRow, Target, replay, score_table,
};
use crate::model::Evidence;
use crate::service::answers::PoolAnswer;
use crate::service::numbers::date_text;
use crate::service::{ENGINE, Real, ServiceError};

/// Level of the intervals of shares of outcomes.
const SHARE_LEVEL: f64 = 0.9;

/// What would have been forecast at each past snapshot, against what came.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct BacktestRun {
    /// Its id, which its job had too.
    pub id: Uuid,
    /// The network.
    pub network: String,
    /// When it was made, RFC 3339.
    #[schema(format = DateTime)]
    pub created_at: String,
    /// Engine and version that computed it.
    pub engine: String,
    /// Dates of the snapshots it stands on, oldest first.
    pub snapshots: Vec<String>,
    /// Dates of the snapshots that were forecast from.
    pub origins: Vec<String>,
    /// Hub thresholds.
    pub thresholds: Vec<u64>,
    /// Levels of the intervals.
    pub levels: Vec<Real>,
    /// Periods looked ahead at most.
    pub ahead: u64,
    /// The backtest in words.
    pub verdict: String,
    /// Scores of forecasts that were given the arrivals and links that came: they judge the mechanism, how links find their nodes.
    pub given: Vec<ScoreAnswer>,
    /// Scores of forecasts by the arrivals and links that were to be expected at their origin: they judge the whole.
    pub expected: Vec<ScoreAnswer>,
    /// How the members were weighed at the newest origin.
    pub pools: Vec<PoolAnswer>,
    /// What holds for every backtest.
    pub cautions: Vec<String>,
}

/// The scores of all forecasts so many periods ahead.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ScoreAnswer {
    /// Snapshots from the origin to the one that is forecast.
    pub periods_ahead: u32,
    /// The threshold; null for all of them together.
    pub threshold: Option<u64>,
    /// Forecasts scored: those of tails of at least 5 nodes.
    pub cases: u64,
    /// The pooled forecast.
    pub pooled: PooledErrors,
    /// Outcomes inside the pooled forecast's intervals, levels ascending.
    pub coverage: Vec<CoverageRow>,
    /// Every member of the pool, and the plain trends, that has a forecast of every case.
    pub members: Vec<MemberErrors>,
    /// The plain trend with the least mean log error; null where none has a forecast of every case.
    pub best_trend: Option<String>,
    /// 1 − the pool's mean log error over the best trend's: above 0 the pool did better. Null where that trend made no error.
    pub skill: Option<Real>,
    /// 1 − the pool's CRPS over the least mean absolute error of a plain trend, which is the CRPS of a plain number.
    pub crps_skill: Option<Real>,
}

/// Mean errors of the pooled forecast.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct PooledErrors {
    /// Of its middle.
    #[serde(flatten)]
    pub errors: ErrorsAnswer,
    /// Mean continuous ranked probability score of its law, nodes; smaller is better.
    pub crps: Real,
}

/// Mean errors of one way to forecast.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ErrorsAnswer {
    /// Mean |ln(forecast/observed)|.
    pub mean_log_error: Real,
    /// Mean |forecast − observed|, nodes.
    pub mean_absolute_error: Real,
}

/// Mean errors of a member.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct MemberErrors {
    /// A candidate, a candidate corrected by its newest flows, or a plain trend.
    #[schema(examples("mix_flow_corrected"))]
    pub member: String,
    /// Its errors.
    #[serde(flatten)]
    pub errors: ErrorsAnswer,
}

/// How many outcomes lay inside the intervals of one level.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct CoverageRow {
    /// Coverage the intervals aimed at.
    pub level: Real,
    /// Outcomes inside, ends included.
    pub inside: u64,
    /// All outcomes.
    pub cases: u64,
    /// Their share.
    pub share: Real,
    /// Lower end of the true share's 90 % interval (Clopper & Pearson 1934), as if outcomes were independent.
    pub low: Real,
    /// Upper end.
    pub high: Real,
}

/// The document of a backtest whose origins have these records, oldest first.
pub fn document(
    id: Uuid,
    network: &str,
    created_at: Timestamp,
    request: &BacktestRequest,
    evidence: &Evidence,
    records: &[OriginRecord],
) -> Result<String, ServiceError> {
    let observed = |date: Timestamp, threshold: u64| {
        let found = evidence.snapshots().binary_search_by_key(&date, |snapshot| snapshot.as_of).ok()?;
        Some(evidence.snapshots().get(found)?.counts.tail_size(threshold) as f64)
    };
    let levels = request.levels.values();
    let cases = replay(records, &observed).cases;
    let table = |judged| score_table(&cases, judged, levels).iter().map(score).collect::<Vec<_>>();
    let (given, expected) = (table(Judged::Mechanism), table(Judged::Whole));
    let run = BacktestRun {
        id,
        network: network.to_owned(),
        created_at: created_at.to_string(),
        engine: ENGINE.to_owned(),
        snapshots: evidence.snapshots().iter().map(|snapshot| date_text(snapshot.as_of)).collect(),
        origins: records.iter().map(|record| date_text(record.as_of)).collect(),
        thresholds: request.thresholds.values().to_vec(),
        levels: levels.iter().copied().map(Real).collect(),
        ahead: request.ahead as u64,
        verdict: words::verdict(records.len(), &given, &expected),
        given,
        expected,
        pools: pools(records, &observed),
        cautions: words::CAUTIONS.map(str::to_owned).to_vec(),
    };
    serde_json::to_string(&run).map_err(|error| ServiceError::Broken(format!("a backtest: {error}")))
}

/// How members were weighed at the newest origin, by what had come by then.
fn pools(records: &[OriginRecord], observed: &dyn Fn(Timestamp, u64) -> Option<f64>) -> Vec<PoolAnswer> {
    let Some((newest, past)) = records.split_last() else { return Vec::new() };
    let before: Replay = replay(past, observed);
    let known = newest.outlooks.iter().map(|outlook| &outlook.target).filter(|target| target.growth == Growth::Known);
    let used = |target: &Target| {
        let (pool, spread) = (before.pool(newest, target.ahead), before.spread(target.ahead, target.growth));
        PoolAnswer::from(&PoolUse { ahead: target.ahead, pool, spread })
    };
    known.map(used).collect()
}

fn score(row: &ScoreRow) -> ScoreAnswer {
    let scores = &row.scores;
    ScoreAnswer {
        periods_ahead: row.ahead,
        threshold: row.threshold,
        cases: scores.cases,
        pooled: PooledErrors { errors: errors(&scores.pooled), crps: Real(scores.crps) },
        coverage: scores.coverage.iter().filter_map(|(level, coverage)| coverage_row(*level, coverage)).collect(),
        members: (scores.members.iter())
            .map(|(member, own)| MemberErrors { member: member.name().to_owned(), errors: errors(own) })
            .collect(),
        best_trend: scores.best_trend.map(|member: Member| member.name().to_owned()),
        skill: scores.skill.map(Real),
        crps_skill: scores.crps_skill.map(Real),
    }
}

fn errors(errors: &Errors) -> ErrorsAnswer {
    ErrorsAnswer { mean_log_error: Real(errors.log_error), mean_absolute_error: Real(errors.absolute_error) }
}

fn coverage_row(level: f64, coverage: &Coverage) -> Option<CoverageRow> {
    let bounds = coverage.bounds(SHARE_LEVEL)?;
    Some(CoverageRow {
        level: Real(level),
        inside: coverage.inside,
        cases: coverage.cases,
        share: Real(coverage.share()?),
        low: Real(bounds.low),
        high: Real(bounds.high),
    })
}

//! Accounts of issued forecasts: which are due, and how they are kept.

use std::collections::{BTreeMap, HashMap};

use jiff::Timestamp;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use super::answers::{CountAnswer, DateAnswer, EstimateAnswer, ForecastRun, IntervalAnswer, TailAnswer};
use super::evidence::{encode, off_runtime};
use super::jobs::persistently;
use super::numbers::{Count, Real, date_of, date_text};
use super::{RunKind, ServiceError};
use crate::evaluate::{Account, Outcome, account};
use crate::forecast::{CountForecast, DateForecast, DegreeForecast, TailForecast};
use crate::model::{Interval, Snapshot};
use crate::store::{AccountKey, IssuedRun, NewAccount, Store};

/// A snapshot is held against so many of the forecasts that reach its date, the last issued first: what a landing costs
/// does not grow with a network's age.
pub const MOST_FORECASTS: usize = 24;
/// Most accounts of one refresh, newest snapshots first; a link list that replaces a long past is accounted for in steps.
const MOST_AT_ONCE: usize = 240;

/// Accounts to be stored.
#[derive(Debug, Default)]
pub struct Accounts {
    /// New ones.
    pub made: Vec<NewAccount>,
    /// Those against counts that are stored no more.
    pub withdrawn: Vec<(Uuid, Timestamp)>,
}

/// An account as it is kept.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct KeptAccount {
    /// Date of the newest counts that the forecast stood on.
    pub origin: String,
    /// The forecast's own preferential share.
    pub preferential_share: EstimateAnswer,
    /// Its links per arrival.
    pub links_per_arrival: EstimateAnswer,
    /// What came.
    #[serde(flatten)]
    pub date: DateOutcome,
}

/// What a snapshot showed of a forecast.
#[derive(Debug, Clone, Serialize, Deserialize, ToSchema)]
pub struct DateOutcome {
    /// Days from the newest counts that the forecast stood on to the snapshot.
    pub days_ahead: Real,
    /// Nodes.
    pub nodes: OutcomeAnswer,
    /// Link ends.
    pub links: OutcomeAnswer,
    /// Tail sizes, thresholds ascending.
    pub tail: Vec<TailOutcome>,
}

/// A count that was forecast, and what came. Between dates that were forecast, what was stated is interpolated.
#[derive(Debug, Clone, Serialize, Deserialize, ToSchema)]
pub struct OutcomeAnswer {
    /// What came.
    pub observed: Count,
    /// The expectation stated.
    pub expected: Real,
    /// The median stated.
    pub median: Real,
    /// ln(expected/observed): positive where too much was forecast; either counts as one node where it is less.
    pub log_error: Real,
    /// Weighted interval score, nodes; smaller is better (Bracher, Ray, Gneiting & Reich 2021).
    pub weighted_interval_score: Real,
    /// The intervals stated, levels ascending.
    pub intervals: Vec<IntervalOutcome>,
}

/// A tail size that was forecast, and what came.
#[derive(Debug, Clone, Serialize, Deserialize, ToSchema)]
pub struct TailOutcome {
    /// The threshold.
    pub threshold: u64,
    /// What came.
    #[serde(flatten)]
    pub outcome: OutcomeAnswer,
}

/// An interval, and whether what came lies in it.
#[derive(Debug, Clone, Copy, Serialize, Deserialize, ToSchema)]
pub struct IntervalOutcome {
    /// Coverage it aimed at.
    pub level: Real,
    /// Lower end.
    pub low: Real,
    /// Upper end.
    pub high: Real,
    /// Whether what came lies within, ends included.
    pub inside: bool,
}

/// The accounts that `snapshots`, oldest first, call for and that are not kept yet.
pub async fn due(store: &Store, network: &str, snapshots: Vec<Snapshot>) -> Result<Accounts, ServiceError> {
    let issued = persistently(|| store.list_issued(network)).await?;
    let keys = persistently(|| store.list_account_keys(network)).await?;
    if issued.is_empty() {
        return Ok(Accounts::default());
    }
    let tagged = off_runtime(move || with_tags(snapshots)).await?;
    let tagged = tagged.map_err(|error| ServiceError::Broken(error.to_string()))?;
    let withdrawn = keys.iter().filter(|key| !stands(&tagged, key)).map(|key| (key.run, key.as_of)).collect();
    let mut made = Vec::new();
    let wanted = wanted(&issued, &keys, &tagged);
    for run in issued {
        let Some(dates) = wanted.get(&run.id) else { continue };
        // A forecast that was deleted meanwhile has no account.
        let Some(found) = store.find_run(RunKind::Forecast, run.id).await? else { continue };
        let against: Vec<(String, Snapshot)> = dates.iter().filter_map(|date| tagged.get(date).cloned()).collect();
        made.extend(off_runtime(move || accounts_of(&run, &found.document, &against)).await??);
    }
    Ok(Accounts { made, withdrawn })
}

type Tagged = BTreeMap<Timestamp, (String, Snapshot)>;

fn with_tags(snapshots: Vec<Snapshot>) -> Result<Tagged, serde_json::Error> {
    let tagged = |snapshot: Snapshot| Ok((snapshot.as_of, (encode::counts_tag(&snapshot.counts)?, snapshot)));
    snapshots.into_iter().map(tagged).collect()
}

fn stands(tagged: &Tagged, key: &AccountKey) -> bool {
    tagged.get(&key.as_of).is_some_and(|(tag, _)| *tag == key.snapshot_tag)
}

/// The dates to hold each forecast against.
fn wanted(issued: &[IssuedRun], keys: &[AccountKey], tagged: &Tagged) -> HashMap<Uuid, Vec<Timestamp>> {
    let kept: HashMap<(Uuid, Timestamp), &str> =
        keys.iter().map(|key| ((key.run, key.as_of), key.snapshot_tag.as_str())).collect();
    let mut wanted: HashMap<Uuid, Vec<Timestamp>> = HashMap::new();
    let newest_first = tagged.iter().rev().flat_map(|(&date, (tag, _))| {
        let reaching = issued.iter().filter(move |run| run.origin < date && date <= run.issued_to);
        reaching.take(MOST_FORECASTS).map(move |run| (run.id, date, tag.as_str()))
    });
    let missing = newest_first.filter(|&(run, date, tag)| kept.get(&(run, date)) != Some(&tag));
    for (run, date, _) in missing.take(MOST_AT_ONCE) {
        wanted.entry(run).or_default().push(date);
    }
    wanted
}

fn accounts_of(
    run: &IssuedRun,
    document: &str,
    against: &[(String, Snapshot)],
) -> Result<Vec<NewAccount>, ServiceError> {
    let issued: ForecastRun = serde_json::from_str(document)
        .map_err(|error| ServiceError::Broken(format!("a kept forecast cannot be read: {error}")))?;
    let forecast = issued.answer.forecast.iter().map(date_forecast).collect::<Result<Vec<_>, _>>()?;
    let mut made = Vec::new();
    for (tag, snapshot) in against {
        let Some(found) = account(run.origin, &forecast, snapshot) else { continue };
        let kept = KeptAccount {
            origin: date_text(run.origin),
            preferential_share: issued.answer.fit.preferential_share,
            links_per_arrival: issued.answer.fit.links_per_arrival,
            date: DateOutcome::from(&found),
        };
        let text = serde_json::to_string(&kept).map_err(|error| ServiceError::Broken(error.to_string()))?;
        let key = AccountKey { run: run.id, as_of: snapshot.as_of, snapshot_tag: tag.clone() };
        made.push(NewAccount { key, account: text });
    }
    Ok(made)
}

/// What a kept forecast states for a date, as the core has it.
fn date_forecast(at: &DateAnswer) -> Result<DateForecast, ServiceError> {
    let date = date_of(&at.date).ok_or_else(|| ServiceError::Broken(format!("a kept forecast for {:?}", at.date)))?;
    let tail = |row: &TailAnswer| TailForecast {
        threshold: row.threshold,
        size: count(row.now, row.expected, row.median, &row.intervals),
    };
    let whole = |given: &CountAnswer| count(given.now, given.expected, given.median, &given.intervals);
    let largest = &at.largest_degree;
    Ok(DateForecast {
        date,
        nodes: whole(&at.nodes),
        links: whole(&at.links),
        largest_degree: DegreeForecast {
            now: largest.now.0,
            median: largest.median.0,
            intervals: largest.intervals.iter().map(interval).collect(),
        },
        tail: at.tail.iter().map(tail).collect(),
    })
}

fn count(now: Count, expected: Real, median: Real, intervals: &[IntervalAnswer]) -> CountForecast {
    let intervals = intervals.iter().map(interval).collect();
    CountForecast { now: now.0, expected: expected.0, median: median.0, intervals }
}

fn interval(given: &IntervalAnswer) -> Interval {
    Interval { level: given.level.0, low: given.low.0, high: given.high.0 }
}

impl From<&Account> for DateOutcome {
    fn from(found: &Account) -> Self {
        let tail = found
            .tail
            .iter()
            .map(|(threshold, outcome)| TailOutcome { threshold: *threshold, outcome: OutcomeAnswer::from(outcome) });
        Self {
            days_ahead: Real(found.days_ahead),
            nodes: OutcomeAnswer::from(&found.nodes),
            links: OutcomeAnswer::from(&found.links),
            tail: tail.collect(),
        }
    }
}

impl From<&Outcome> for OutcomeAnswer {
    fn from(outcome: &Outcome) -> Self {
        let interval = |interval: &Interval| IntervalOutcome {
            level: Real(interval.level),
            low: Real(interval.low),
            high: Real(interval.high),
            inside: outcome.is_inside(interval),
        };
        Self {
            observed: Count(outcome.observed),
            expected: Real(outcome.expected),
            median: Real(outcome.median),
            log_error: Real(outcome.log_error()),
            weighted_interval_score: Real(outcome.weighted_interval_score()),
            intervals: outcome.intervals.iter().map(interval).collect(),
        }
    }
}

impl OutcomeAnswer {
    /// As the core has it.
    pub fn to_core(&self) -> Outcome {
        let interval = |i: &IntervalOutcome| Interval { level: i.level.0, low: i.low.0, high: i.high.0 };
        Outcome {
            observed: self.observed.0,
            expected: self.expected.0,
            median: self.median.0,
            intervals: self.intervals.iter().map(interval).collect(),
        }
    }
}

//! A network's accuracy: its accounts summed up, in figures and in words.

use std::collections::BTreeMap;

use jiff::Timestamp;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use super::accounts::{DateOutcome, KeptAccount, MOST_FORECASTS};
use super::answers::{EstimateAnswer, FitReport, WarningAnswer};
use super::numbers::{Real, date_of, date_text};
use super::{NetworkName, Service, ServiceError};
use crate::evaluate::{
    Account, DRIFT_TEST_LEVEL, DriftCause, DriftTest, FitRecord, IssuedAccount, Outcome, OutcomeSummary, drift_test,
};
use crate::model::{Estimate, Interval};
use crate::store::StoredAccount;

/// What holds for every report.
const CAUTIONS: [&str; 3] = [
    "A record tells how past forecasts did, not how the next will do; a launch, a policy change or a ranking change makes it \
     void.",
    "Outcomes at neighbouring thresholds, and of one date by several forecasts, move together: shares of many outcomes rest on \
     fewer independent ones than they count.",
    "Where a capacity failure could harm people, your own engineering practice and its safety margins come before this report.",
];

/// How a network's issued forecasts did against later snapshots.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct AccuracyAnswer {
    /// The network.
    pub network: String,
    /// The report in words.
    pub verdict: String,
    /// The test of recent outcomes; null before the first.
    pub drift: Option<DriftAnswer>,
    /// Every tail size of every account; null before the first.
    pub summary: Option<SummaryAnswer>,
    /// The same by threshold, ascending.
    pub thresholds: Vec<ThresholdSummary>,
    /// The last 24 forecasts that a snapshot has met, newest first.
    pub forecasts: Vec<ForecastAccounts>,
    /// What must be known before acting.
    pub warnings: Vec<WarningAnswer>,
    /// What holds for every report.
    pub cautions: Vec<String>,
}

/// The test of recent outcomes: of each of the newest 12 dates the forecast issued last before it. A date is missed when at
/// least half of its thresholds lie outside their intervals.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct DriftAnswer {
    /// Whether it warns: the p-value is below the test's level.
    pub warns: bool,
    /// Level of the test.
    pub test_level: Real,
    /// Level of the intervals.
    pub interval_level: Real,
    /// Dates looked at.
    pub dates: u64,
    /// Those missed.
    pub missed: u64,
    /// Probability of at least so many, had the intervals been right (binomial).
    pub p_value: Real,
    /// Likely causes; empty without a warning.
    pub causes: Vec<DriftCauseName>,
}

/// A likely cause of drift.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum DriftCauseName {
    /// The share of links that go by degree moved.
    PreferentialShare,
    /// The links per arrival moved.
    LinksPerArrival,
    /// Arrivals went off their plan.
    Arrivals,
    /// Growth has another shape.
    Shape,
}

/// Outcomes summed up.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct SummaryAnswer {
    /// Outcomes.
    pub outcomes: u64,
    /// Mean of ln(expected/observed): positive where too much was forecast.
    pub mean_log_error: Real,
    /// Mean of its absolute value.
    pub mean_absolute_log_error: Real,
    /// Mean weighted interval score, nodes.
    pub weighted_interval_score: Real,
    /// One entry a level, ascending.
    pub coverage: Vec<CoverageAnswer>,
}

/// How many outcomes lay within their intervals of one level.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, ToSchema)]
pub struct CoverageAnswer {
    /// Coverage aimed at.
    pub level: Real,
    /// Outcomes within.
    pub inside: u64,
    /// Their share.
    pub share: Real,
}

/// The outcomes at one threshold.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct ThresholdSummary {
    /// The threshold.
    pub threshold: u64,
    /// Its outcomes.
    #[serde(flatten)]
    pub summary: SummaryAnswer,
}

/// What came of one forecast.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct ForecastAccounts {
    /// The forecast, at `/v1/forecasts/{id}`.
    pub id: Uuid,
    /// When it was issued, RFC 3339.
    #[schema(format = DateTime)]
    pub issued_at: String,
    /// Date of the newest counts that it stood on.
    pub origin: String,
    /// When counts it stood on were last replaced; null when they stand.
    #[schema(format = DateTime)]
    pub evidence_corrected_at: Option<String>,
    /// Its tail sizes summed up.
    pub summary: Option<SummaryAnswer>,
    /// One entry a snapshot, dates ascending.
    pub dates: Vec<DateAccount>,
}

/// What one snapshot showed.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct DateAccount {
    /// The snapshot's date.
    pub as_of: String,
    /// What came.
    #[serde(flatten)]
    pub outcome: DateOutcome,
}

impl Service {
    /// How a network's issued forecasts did.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn accuracy(&self, name: &NetworkName) -> Result<AccuracyAnswer, ServiceError> {
        let network = self.network(name).await?;
        let stored = self.store.list_accounts(name.as_str(), MOST_FORECASTS as u32).await?;
        let latest = self.store.find_latest(name.as_str()).await?;
        let (name, planned) = (name.as_str().to_owned(), network.settings.forecast_plan.is_some());
        let report = move || {
            let newest = latest.map(|latest| newest_fit(&latest.run.document)).transpose()?;
            report(name, planned, stored, newest.as_ref())
        };
        super::evidence::off_runtime(report).await?
    }
}

/// The fit of a kept forecast.
pub(super) fn newest_fit(document: &str) -> Result<FitRecord, ServiceError> {
    #[derive(Deserialize)]
    struct Run {
        fit: FitReport,
    }
    let run: Run = serde_json::from_str(document).map_err(|error| never_kept(&error))?;
    Ok(record(&run.fit.preferential_share, &run.fit.links_per_arrival))
}

fn report(
    network: String,
    planned: bool,
    stored: Vec<StoredAccount>,
    newest: Option<&FitRecord>,
) -> Result<AccuracyAnswer, ServiceError> {
    let mut accounts = Vec::new();
    let mut forecasts: Vec<ForecastAccounts> = Vec::new();
    for found in stored {
        let kept: KeptAccount = serde_json::from_str(&found.account).map_err(|error| never_kept(&error))?;
        accounts.push(issued_account(found.as_of, &kept)?);
        let date = DateAccount { as_of: date_text(found.as_of), outcome: kept.date };
        match forecasts.last_mut() {
            Some(last) if last.id == found.run => last.dates.push(date),
            _ => forecasts.push(ForecastAccounts {
                id: found.run,
                issued_at: found.issued_at.to_string(),
                origin: kept.origin,
                evidence_corrected_at: found.evidence_corrected_at.map(|time| time.to_string()),
                summary: None,
                dates: vec![date],
            }),
        }
    }
    for forecast in &mut forecasts {
        let outcomes: Vec<Outcome> = forecast.dates.iter().flat_map(|date| tail(&date.outcome)).collect();
        forecast.summary = OutcomeSummary::of(&outcomes).map(SummaryAnswer::from);
    }
    let mut by_threshold: BTreeMap<u64, Vec<&Outcome>> = BTreeMap::new();
    for (threshold, outcome) in accounts.iter().flat_map(|issued| &issued.account.tail) {
        by_threshold.entry(*threshold).or_default().push(outcome);
    }
    let summary = OutcomeSummary::of(by_threshold.values().flatten().copied());
    let drift = drift_test(&accounts, newest);
    let thresholds = by_threshold.iter().filter_map(|(&threshold, outcomes)| {
        let summary = OutcomeSummary::of(outcomes.iter().copied())?;
        Some(ThresholdSummary { threshold, summary: summary.into() })
    });
    Ok(AccuracyAnswer {
        network,
        verdict: verdict(planned, forecasts.len(), summary.as_ref(), drift.as_ref()),
        thresholds: thresholds.collect(),
        summary: summary.map(SummaryAnswer::from),
        forecasts,
        warnings: drift.as_ref().and_then(warning).into_iter().collect(),
        drift: drift.map(DriftAnswer::from),
        cautions: CAUTIONS.map(str::to_owned).to_vec(),
    })
}

fn tail(found: &DateOutcome) -> impl Iterator<Item = Outcome> {
    found.tail.iter().map(|row| row.outcome.to_core())
}

/// A kept account as the core has it.
pub(super) fn issued_account(as_of: Timestamp, kept: &KeptAccount) -> Result<IssuedAccount, ServiceError> {
    let date = &kept.date;
    Ok(IssuedAccount {
        origin: date_of(&kept.origin).ok_or_else(|| never_kept(&kept.origin))?,
        fit: record(&kept.preferential_share, &kept.links_per_arrival),
        account: Account {
            as_of,
            days_ahead: date.days_ahead.0,
            nodes: date.nodes.to_core(),
            links: date.links.to_core(),
            tail: date.tail.iter().map(|row| (row.threshold, row.outcome.to_core())).collect(),
        },
    })
}

fn record(share: &EstimateAnswer, links: &EstimateAnswer) -> FitRecord {
    let estimate = |given: &EstimateAnswer| Estimate {
        value: given.estimate.0,
        interval: match (given.low, given.high, given.level) {
            (Some(low), Some(high), Some(level)) => Some(Interval { level: level.0, low: low.0, high: high.0 }),
            _ => None,
        },
    };
    FitRecord { preferential_share: estimate(share), links_per_arrival: estimate(links) }
}

fn verdict(planned: bool, forecasts: usize, summary: Option<&OutcomeSummary>, drift: Option<&DriftTest>) -> String {
    let Some((summary, drift)) = summary.zip(drift) else {
        return match planned {
            true => {
                "No forecast has met a later snapshot yet; the first one that lands within a forecast's dates is held \
                     against it."
                    .to_owned()
            }
            false => {
                "The network has no forecast_plan, so no forecast was issued that could be accounted for; store a plan \
                      with its settings."
                    .to_owned()
            }
        };
    };
    let percent = |share: f64| format!("{:.1} %", 100.0 * share);
    let coverage = summary.coverage.iter().filter_map(|(level, covered)| {
        Some(format!("{} of outcomes lay within their {:.0} % intervals", percent(covered.share()?), 100.0 * level))
    });
    let side = if summary.mean_log_error > 0.0 { "too much" } else { "too little" };
    let forecast = if forecasts == 1 { "forecast" } else { "forecasts" };
    format!(
        "Over the last {forecasts} {forecast} that snapshots have met, {}. The typical error was {}, on the whole {} {side}. {}",
        coverage.collect::<Vec<_>>().join(" and "),
        percent(summary.mean_absolute_log_error.exp_m1()),
        percent(summary.mean_log_error.abs().exp_m1()),
        drift_in_words(drift)
    )
}

/// What the test of recent outcomes says.
pub(super) fn drift_in_words(drift: &DriftTest) -> String {
    let seen = format!(
        "Of the {} newest dates, {} missed: at least half of the thresholds lay outside their {:.0} % intervals",
        drift.dates,
        drift.missed,
        100.0 * drift.level
    );
    if !drift.warns() {
        return format!("{seen}; that is no more than chance allows (probability {:.2}).", drift.p_value);
    }
    let causes: Vec<&str> = drift.causes.iter().map(|cause| cause.in_words()).collect();
    format!(
        "{seen}, which would happen with probability {:.1e} were the intervals right. Likely cause: {}.",
        drift.p_value,
        causes.join("; and ")
    )
}

fn warning(drift: &DriftTest) -> Option<WarningAnswer> {
    drift.warns().then(|| WarningAnswer {
        code: "drift".to_owned(),
        detail: format!("{} Plan with wider margins until forecasts and outcomes agree again.", drift_in_words(drift)),
    })
}

fn never_kept(why: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a kept account or forecast cannot be read: {why}"))
}

impl From<DriftTest> for DriftAnswer {
    fn from(test: DriftTest) -> Self {
        Self {
            warns: test.warns(),
            test_level: Real(DRIFT_TEST_LEVEL),
            interval_level: Real(test.level),
            dates: test.dates,
            missed: test.missed,
            p_value: Real(test.p_value),
            causes: test.causes.into_iter().map(DriftCauseName::from).collect(),
        }
    }
}

impl From<DriftCause> for DriftCauseName {
    fn from(cause: DriftCause) -> Self {
        match cause {
            DriftCause::PreferentialShare => Self::PreferentialShare,
            DriftCause::LinksPerArrival => Self::LinksPerArrival,
            DriftCause::Arrivals => Self::Arrivals,
            DriftCause::Shape => Self::Shape,
        }
    }
}

impl From<OutcomeSummary> for SummaryAnswer {
    fn from(summary: OutcomeSummary) -> Self {
        let coverage = summary.coverage.iter().filter_map(|&(level, covered)| {
            Some(CoverageAnswer { level: Real(level), inside: covered.inside, share: Real(covered.share()?) })
        });
        Self {
            outcomes: summary.outcomes,
            mean_log_error: Real(summary.mean_log_error),
            mean_absolute_log_error: Real(summary.mean_absolute_log_error),
            weighted_interval_score: Real(summary.weighted_interval_score),
            coverage: coverage.collect(),
        }
    }
}

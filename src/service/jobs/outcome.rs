//! What came of a job, as it is kept and answered.

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use crate::ingest::{FaultyLines, LinkReport};
use crate::service::ServiceError;
use crate::store::Clash;

/// What came of a job.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum JobOutcome {
    /// A link list was counted.
    Result(LinkListResult),
    /// A network's forecast was made anew, or there was none to make.
    Refresh(RefreshResult),
    /// A backtest was made.
    Backtest(BacktestResult),
    /// Why it was not.
    Problem(JobProblem),
}

/// What was derived from a link list and stored.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct LinkListResult {
    /// Lines with a link or a fault.
    pub lines: u64,
    /// Links counted.
    pub links: u64,
    /// Nodes at the end.
    pub nodes: u64,
    /// Snapshots stored.
    pub snapshots: u64,
    /// Date of the newest one, the time of the last link.
    pub newest_snapshot: String,
    /// Tables of transitions stored.
    pub transitions: u64,
    /// Link ends that landed on nodes that were there before; 0 when no link events were stored.
    pub landings: u64,
    /// Lines that were passed over.
    pub skipped: SkippedLines,
    /// Whether an instant had so many links that repeats were no longer looked for in the rest of it.
    pub repeats_unchecked: bool,
}

/// What a refresh came to.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct RefreshResult {
    /// The state of the network that it looked at, counted in changes of evidence and plan.
    pub revision: u64,
    /// The forecast that is the latest now; null when there was none to make.
    pub forecast: Option<Uuid>,
    /// Accounts of earlier forecasts that were made.
    pub accounts: u64,
    /// Why there was no forecast to make; null when there was one.
    pub reason: Option<String>,
}

/// What a backtest came to.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct BacktestResult {
    /// The backtest, under `/v1/backtests`.
    pub backtest: Uuid,
    /// Snapshots that were forecast from.
    pub origins: u64,
}

/// Lines that were passed over, by what is wrong with them.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct SkippedLines {
    /// Their time is earlier than that of the last link before.
    pub out_of_order: PassedOver,
    /// They say what an earlier line of the same time says.
    pub repeated: PassedOver,
    /// They link a node to itself.
    pub self_links: PassedOver,
    /// They cannot be read.
    pub malformed: PassedOver,
}

/// Lines with one kind of fault.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct PassedOver {
    /// How many.
    pub count: u64,
    /// The first few.
    pub first: Vec<JobFault>,
}

/// Why a job changed nothing.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct JobProblem {
    /// Stable name.
    pub code: JobFailure,
    /// What was wrong and what to do about it.
    pub detail: String,
    /// The faults that were found, each with its place.
    pub errors: Vec<JobFault>,
}

/// Why a job changed nothing, by name.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum JobFailure {
    /// The list, or how it is to be counted, is wrong.
    InvalidRequest,
    /// The list has more nodes than configured.
    BodyTooLarge,
    /// The network's degrees count something else by now.
    DegreeKindFixed,
    /// What was derived is more than one network may have.
    NetworkFull,
    /// Nothing is stored that a forecast could start from.
    NoSnapshot,
    /// One snapshot does not tell how many nodes arrive.
    ArrivalsRequired,
    /// The evidence does not tell the mix.
    NotIdentified,
    /// No network can do what is asked.
    Impossible,
    /// The numbers could not be computed to the stated accuracy.
    NotConverged,
    /// It took longer than configured.
    TooSlow,
    /// The list lies here no more.
    ListMissing,
    /// The process stopped each time the job was at work.
    Interrupted,
    /// A fault of ours.
    Internal,
}

/// One thing wrong, with its place.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct JobFault {
    /// Line of the list.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub line: Option<u64>,
    /// Parameter of the query.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub parameter: Option<String>,
    /// What is wrong and what to do about it.
    pub detail: String,
}

impl JobOutcome {
    /// As kept.
    pub(super) fn to_json(&self) -> Result<String, ServiceError> {
        serde_json::to_string(self).map_err(|error| ServiceError::Broken(error.to_string()))
    }

    /// As read back.
    pub(super) fn from_json(text: &str) -> Result<Self, ServiceError> {
        serde_json::from_str(text).map_err(|error| ServiceError::Broken(format!("a job's outcome: {error}")))
    }
}

impl JobFault {
    /// In a line of the list.
    pub fn in_line(line: u64, detail: impl Into<String>) -> Self {
        Self { line: Some(line), parameter: None, detail: detail.into() }
    }

    /// In a parameter of the query.
    pub fn in_parameter(name: &str, detail: impl Into<String>) -> Self {
        Self { line: None, parameter: Some(name.to_owned()), detail: detail.into() }
    }
}

impl JobProblem {
    /// A wrong list.
    pub fn invalid(detail: impl Into<String>, errors: Vec<JobFault>) -> Self {
        Self { code: JobFailure::InvalidRequest, detail: detail.into(), errors }
    }

    /// More nodes than configured.
    pub fn too_many_nodes(most: u64) -> Self {
        let detail = format!(
            "The list has more than {most} nodes. Send degree counts in its place, which take one row however many nodes \
             there are, or raise jobs.link_list_nodes."
        );
        Self { code: JobFailure::BodyTooLarge, detail, errors: Vec::new() }
    }

    /// A process that stopped too often; `again` says how to try once more.
    pub fn interrupted(times: u64, again: &str) -> Self {
        let detail = format!(
            "The service stopped {times} times while this job was at work, so it is not begun again. See to the memory \
             the service has, then {again}."
        );
        Self { code: JobFailure::Interrupted, detail, errors: Vec::new() }
    }

    /// The list is not where it was put, as after a restore of an older database.
    pub fn list_missing() -> Self {
        let detail = "The list lies here no more: the database was restored from a backup, which holds no lists, or somebody removed \
                      it. Send it again.";
        Self { code: JobFailure::ListMissing, detail: detail.to_owned(), errors: Vec::new() }
    }

    /// What is stored by now, or may be stored, does not take what was derived.
    pub fn clash(clash: &Clash) -> Self {
        let (code, detail) = match clash {
            Clash::TooManyRows { total, most } => (
                JobFailure::NetworkFull,
                format!(
                    "The list makes {total} rows of evidence, more than the {most} that are kept of one network. Choose a \
                     longer period in every, or raise limits.network_rows."
                ),
            ),
            _ => (
                JobFailure::DegreeKindFixed,
                "The network's degree_kind changed while its list was counted; send the list again.".to_owned(),
            ),
        };
        Self { code, detail, errors: Vec::new() }
    }

    /// What a use case of this service says against the work.
    pub fn refusal(error: &ServiceError) -> Self {
        let (code, detail) = match error {
            ServiceError::NoSnapshot => {
                (JobFailure::NoSnapshot, "the network has no snapshot, so there is nothing to forecast from".to_owned())
            }
            ServiceError::ArrivalsRequired => (
                JobFailure::ArrivalsRequired,
                "one snapshot does not tell how many nodes arrive; give forecast_plan.arrivals, or a second snapshot"
                    .to_owned(),
            ),
            ServiceError::NotIdentified(why) => (JobFailure::NotIdentified, why.clone()),
            ServiceError::Impossible(why) => (JobFailure::Impossible, why.clone()),
            ServiceError::NotConverged(why) => (JobFailure::NotConverged, why.clone()),
            ServiceError::TooSlow { budget } => (
                JobFailure::TooSlow,
                format!(
                    "it was not done within {} s; plan fewer dates and thresholds, or raise jobs.refresh_seconds",
                    budget.as_secs()
                ),
            ),
            other => {
                tracing::error!(cause = %other, "a job could not be done");
                return Self::internal();
            }
        };
        Self { code, detail, errors: Vec::new() }
    }

    /// A fault of ours; the cause went to the log.
    pub fn internal() -> Self {
        let detail = "Something broke on our side; the log has the cause under this job's id.".to_owned();
        Self { code: JobFailure::Internal, detail, errors: Vec::new() }
    }
}

impl SkippedLines {
    /// What a report says of faulty lines.
    pub fn of(report: &LinkReport) -> Self {
        let passed_over = |lines: &FaultyLines| PassedOver {
            count: lines.count,
            first: lines.first.iter().map(|(line, detail)| JobFault::in_line(*line, detail.as_str())).collect(),
        };
        Self {
            out_of_order: passed_over(&report.out_of_order),
            repeated: passed_over(&report.repeated),
            self_links: passed_over(&report.self_links),
            malformed: passed_over(&report.malformed),
        }
    }

    /// The first few of every kind.
    pub fn first(&self) -> Vec<JobFault> {
        [&self.out_of_order, &self.repeated, &self.self_links, &self.malformed]
            .into_iter()
            .flat_map(|lines| lines.first.iter().cloned())
            .collect()
    }
}

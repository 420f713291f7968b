//! Use cases: check, compute off the runtime within a time budget, keep the run, answer with what was kept.

mod access;
mod accounts;
mod accuracy;
mod answers;
mod background;
mod backtests;
mod compute;
mod cpu;
mod error;
mod evidence;
mod gauges;
mod inputs;
mod jobs;
mod latest;
mod network;
mod networks;
mod news;
mod notices;
mod numbers;
mod plan;
mod questions;
mod runs;
mod sources;
mod upkeep;

use std::future::Future;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use tokio::sync::Semaphore;
use tokio::time::timeout;
use tracing::{Instrument, info_span};

use crate::config::{Config, DatabaseConfig, RetentionConfig};
use crate::model::MAX_SNAPSHOTS;
use crate::store::{Caps, Store, StoreError, author, authored_on};
use gauges::Briefs;
use jobs::Board;
use news::TellingCache;
use notices::Notices;
use sources::Sources;

pub use crate::evaluate::OriginRequest;
pub use crate::fit::{FitRequest, Fixed, Model, ModelChoice, Rung};
pub use crate::ingest::FaultPolicy;
pub use crate::store::{
    AuditFilter, AuditLine, Authorship, BacktestSummary, BackupError, BackupReport, Belonging, Clash, JobFilter,
    JobKind, JobState, KeyClaim, KeyScope, LatestForecast, LatestStamp, NetworkSummary, NewNetwork, NoticeKind,
    QuestionKind, RefreshState, RefreshStatus, RestoreReport, RunFilter, RunKind, RunSummary, SnapshotSummary,
    StoreFault, StoredBacktest, StoredJob, StoredKey, StoredLinkEvents, StoredNetwork, StoredQuestion, StoredRun,
    StoredSnapshot, StoredTransitions, TransitionsSummary, Upload, WriteCounts, authored, back_up, restore,
};
pub use crate::webhook::{AddressFault, Target};
pub use access::{Allowance, KeyCabinet, KeyError, KeyFault, KeyRing, KeyTerms, LiveKey, Meter, Spent, Standing};
pub use accounts::{DateOutcome, IntervalOutcome, OutcomeAnswer, TailOutcome};
pub use accuracy::{
    AccuracyAnswer, CoverageAnswer, DateAccount, DriftAnswer, DriftCauseName, ForecastAccounts, SummaryAnswer,
    ThresholdSummary,
};
pub use answers::{
    AmountAnswer, AttachmentAnswer, AttachmentModel, BandAnswer, BandsAnswer, BandsAtDateAnswer, CandidateAnswer,
    ClassPassedAnswer, ClassPassingAnswer, CountAnswer, CurvePointAnswer, DateAnswer, DateAtAnswer, DegreeAnswer,
    EstimateAnswer, EvidenceKind, FitAnswer, FitReport, FitRun, ForecastAnswer, ForecastRun, GoodnessAnswer,
    HistoryAnswer, HubRankAnswer, IntervalAnswer, LimitAnswer, LimitAtDateAnswer, NextHubsAnswer, OutlierClassAnswer,
    PassedAnswer, PassingAnswer, PeriodRatesAnswer, PoolAnswer, PoolMemberAnswer, ScenarioAnswer, ScenarioAtDateAnswer,
    SustainableAnswer, TailAnswer, TailCountAnswer, TailDifferenceAnswer, TailPointAnswer, TransitionsAnswer,
    WarningAnswer, WatchAnswer, WatchedClassAnswer, WatchedDegreeAnswer, WatchedNodeAnswer,
};
pub use background::{Unfinished, converted};
pub use backtests::{
    BacktestRequest, BacktestRun, CoverageRow, DEFAULT_AHEAD, ErrorsAnswer, MOST_AHEAD, MemberErrors, PooledErrors,
    ScoreAnswer,
};
pub use compute::{Question, answer_at_once};
pub use cpu::CpuPool;
pub use error::{ServiceError, Thing};
pub use evidence::{NetworkEvidence, RunOrigin, Written};
pub use gauges::{ForecastGauges, GaugeCaps, LeftOut, LimitGauges, NetworkGauges, TailGauges};
pub use inputs::{DEFAULT_RISK, DEFAULT_SEED, FitInputs, ForecastInputs, Label, MAX_SEED, TextFault, sha256_hex};
pub use jobs::{
    BacktestResult, JobFailure, JobFault, JobOutcome, JobProblem, JobView, LinkListResult, LinkListTask, PassedOver,
    RefreshResult, SkippedLines,
};
pub use latest::PolledForecast;
pub use network::{Description, NameFault, NetworkName, NetworkSettings, kind_name};
pub use news::{LimitNews, NetworkNews, NewsKind, NewsPlace};
pub use notices::{
    DeliveriesAnswer, DeliveryState, DriftNotice, EventAnswer, EventType, LimitNotice, NoticeAnswer, NoticeData,
    NoticeKindName, NoticeStanding, NoticeTerms, ToldLimit,
};
pub use numbers::{Count, Real, date_of, date_text};
pub use questions::{KeptLimitAnswer, LimitStanding, LimitState, QuestionName};
pub use sources::{
    AskedRun, DEFAULT_TIMEOUT_SECONDS, MAX_QUERY_CHARS, SourceAnswer, SourceFailure, SourceStanding, SourceState,
    SourceSuccess, SourceTerms,
};

/// The name and version every run carries.
pub const ENGINE: &str = concat!(env!("CARGO_PKG_NAME"), " ", env!("CARGO_PKG_VERSION"));

/// Target of the spans that traces are made of; log lines do not show them.
const TRACES: &str = "tailcast::traces";

/// The use cases over one database.
#[derive(Debug, Clone)]
pub struct Service {
    store: Store,
    cpu: CpuPool,
    keys: KeyRing,
    caps: Caps,
    jobs: Board,
    /// What the gauges tell of forecasts, read once each.
    briefs: Briefs,
    /// What followers of networks are told of forecasts, read once for all of them.
    told: TellingCache,
    notices: Notices,
    sources: Sources,
    retention: RetentionConfig,
    /// Whether the start looked at all of the database file.
    checked_at_start: bool,
    /// Stored evidence may be large: no more runs hold some at once than can be computed at once.
    evidence_places: Arc<Semaphore>,
    /// Whether the process is about to stop.
    stopping: Arc<AtomicBool>,
    /// Those that wait for it: as many as computations at work and waiting.
    evidence_queue: Arc<Semaphore>,
}

impl Service {
    /// Opens the database, brings its tables up to date if so configured, and sizes the worker pool.
    ///
    /// # Errors
    /// When the database cannot be opened or migrated.
    pub async fn open(config: &Config) -> Result<Self, StoreError> {
        let store = Store::connect(&config.database).await?;
        let checked_at_start = Self::check_at_start(&store, config.database.check_on_start()).await?;
        if config.database.migrate_on_start {
            store.migrate().await?;
        }
        match store.raise_ids().await {
            // Nothing is stored yet.
            Err(StoreError::NoTable(_)) => {}
            raised => raised?,
        }
        let caps = Caps { dates: MAX_SNAPSHOTS as u64, rows: config.limits.network_rows as u64 };
        let cpu = CpuPool::new(&config.compute);
        let evidence_places = Arc::new(Semaphore::new(cpu.workers()));
        let evidence_queue = Arc::new(Semaphore::new(cpu.most()));
        let (jobs, notices) = (Board::new(config.jobs), Notices::new(&config.notices));
        Ok(Self {
            keys: KeyRing::new(store.clone()),
            store,
            cpu,
            caps,
            jobs,
            briefs: Briefs::default(),
            told: TellingCache::default(),
            notices,
            sources: Sources::new(&config.sources, &config.limits),
            retention: config.retention,
            checked_at_start,
            evidence_places,
            evidence_queue,
            stopping: Arc::default(),
        })
    }

    /// Brings the database's tables up to date and closes it.
    ///
    /// # Errors
    /// When the database cannot be opened or migrated.
    pub async fn migrate(database: &DatabaseConfig) -> Result<(), StoreError> {
        let store = Store::connect(database).await?;
        let outcome = store.migrate().await;
        store.close().await;
        outcome
    }

    /// Whether requests can be served: the database answers, its tables are current, and it can be written.
    ///
    /// # Errors
    /// [`ServiceError::Stopping`], [`ServiceError::TablesOutdated`], [`ServiceError::StoreBusy`] or [`ServiceError::StoreUnavailable`]: whatever
    /// the database's fault, the service is not ready and nothing of the service is broken.
    pub async fn check_ready(&self) -> Result<(), ServiceError> {
        if self.is_stopping() {
            return Err(ServiceError::Stopping);
        }
        let ready = async {
            self.store.check_sound()?;
            self.check_tables().await?;
            Ok(self.store.try_write().await?)
        };
        ready.await.map_err(|error| match error {
            ServiceError::Store(error) => ServiceError::StoreUnavailable(error),
            other => other,
        })
    }

    /// Whether the database answers and its tables are current.
    async fn check_tables(&self) -> Result<(), ServiceError> {
        if self.store.is_current().await? { Ok(()) } else { Err(ServiceError::TablesOutdated) }
    }

    /// From here on [`Self::check_ready`] says no, while everything is still served.
    pub fn announce_stop(&self) {
        self.stopping.store(true, Ordering::Relaxed);
    }

    /// Whether a stop was announced.
    pub fn is_stopping(&self) -> bool {
        self.stopping.load(Ordering::Relaxed)
    }

    /// About how long it takes until the computations that wait are done.
    pub fn backlog(&self) -> Duration {
        self.cpu.backlog()
    }

    /// Tells running computations and jobs to stop at their next step.
    pub fn cancel_all(&self) {
        self.cpu.stop();
        self.jobs.stop();
    }

    /// Keeps other services off a database file, until the answer is dropped; nothing on a server, which they share.
    ///
    /// # Errors
    /// When another service has the file.
    pub fn keep_alone(&self) -> Result<Option<std::fs::File>, StoreError> {
        self.store.keep_alone()
    }

    /// Closes the database.
    pub async fn close(&self) {
        // What is not given up now is anybody's when the claim runs out.
        if !matches!(timeout(RELEASE_TIME, self.store.release_claims()).await, Ok(Ok(()))) {
            tracing::warn!("claims on jobs could not be given up; others wait until they run out");
        }
        self.store.close().await;
    }
}

/// Longest wait for claims on jobs to be given up at the stop.
const RELEASE_TIME: Duration = Duration::from_secs(2);

/// Runs a write in a task of its own: a caller that goes away in the middle cannot leave it half done.
async fn in_own_task<T: Send + 'static>(
    write: impl Future<Output = Result<T, ServiceError>> + Send + 'static,
) -> Result<T, ServiceError> {
    // Whose write it is goes with it.
    match tokio::spawn(authored_on(author(), write).instrument(info_span!(target: TRACES, "write"))).await {
        Ok(outcome) => outcome,
        Err(error) => Err(ServiceError::Broken(format!("a write stopped short: {error}"))),
    }
}

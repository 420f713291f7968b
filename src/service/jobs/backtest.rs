//! Backtests as jobs: each origin's record is kept when it is made, so that a restart goes on where the process stopped.

use std::collections::HashSet;
use std::sync::Arc;
use std::time::Duration;

use uuid::Uuid;

use super::board::{Stop, Turn};
use super::outcome::{BacktestResult, JobOutcome, JobProblem};
use super::{MOST_STARTS, persistently, refused};
use crate::evaluate::{OriginError, RecordPlan, record};
use crate::fit::{FitError, FitRequest};
use crate::forecast::ForecastError;
use crate::model::Evidence;
use crate::service::background::in_background;
use crate::service::backtests::{document, record_from_json, record_to_json, too_few};
use crate::service::evidence::{assemble, off_runtime};
use crate::service::{BacktestRequest, DEFAULT_SEED, NetworkName, Service, ServiceError, in_own_task, sha256_hex};
use crate::store::{BacktestWrite, JobKind, NewBacktest, StoreError, StoredJob, kept_now, next_id};

/// How often a backtest begins anew because the evidence changed; after that it ends on the evidence it has, and is outdated.
const MOST_ANEW: usize = 3;
/// Share of the work that is done when every origin has its record.
const RECORDED: f64 = 0.95;

/// Why a backtest has no result.
enum Halt {
    /// Called off, its network gone, or the process stops.
    Stop,
    /// The evidence changed.
    Superseded,
    /// It cannot be done.
    Failed(ServiceError),
}

impl From<ServiceError> for Halt {
    fn from(error: ServiceError) -> Self {
        Self::Failed(error)
    }
}

impl From<StoreError> for Halt {
    fn from(error: StoreError) -> Self {
        Self::Failed(error.into())
    }
}

impl From<Stop> for Halt {
    fn from(_: Stop) -> Self {
        Self::Stop
    }
}

impl Service {
    /// Takes on a backtest; returns the job's id, which is to be the backtest's. It is on disk when this returns.
    ///
    /// # Errors
    /// When there is no such network, it has a live backtest, as many jobs as configured wait, or the database fails.
    pub async fn take_backtest(&self, name: NetworkName, request: &BacktestRequest) -> Result<Uuid, ServiceError> {
        let (service, task) = (self.clone(), request.to_json()?);
        in_own_task(async move {
            let id = next_id();
            let job = (JobKind::Backtest, name.as_str());
            service.store.insert_job(id, job, &task, service.jobs.most_live()).await.map_err(refused)?;
            service.launch(id, JobKind::Backtest);
            Ok(id)
        })
        .await
    }

    /// Whether a network's evidence is enough for a backtest.
    ///
    /// # Errors
    /// When it is not.
    pub fn check_backtest(evidence: &Evidence) -> Result<(), ServiceError> {
        too_few(evidence.snapshots().len()).map_or(Ok(()), Err)
    }

    /// Starts a backtest that a refresh took on.
    pub(super) fn start_backtest(&self, job: Option<Uuid>) {
        if let Some(id) = job {
            self.launch(id, JobKind::Backtest);
        }
    }

    /// Works a backtest to its end, or until the process stops.
    pub(super) async fn backtest(&self, job: &StoredJob, turn: &Turn) -> Result<(), ServiceError> {
        // Each record is a step forward: only starts that came to nothing count.
        let steps = self.store.list_backtest_origins(job.id).await?.len() as u64;
        if job.starts > MOST_STARTS.saturating_add(steps) {
            return self.fail(job, JobProblem::interrupted(job.starts - 1, "ask for the backtest again")).await;
        }
        for round in 0..=MOST_ANEW {
            match self.backtested(job, turn, round < MOST_ANEW).await {
                Ok(()) | Err(Halt::Stop) => return Ok(()),
                Err(Halt::Superseded) => tracing::info!("the evidence changed; the backtest begins anew"),
                Err(Halt::Failed(error)) => return self.fail(job, JobProblem::refusal(&error)).await,
            }
        }
        Ok(())
    }

    /// One pass over the evidence that is stored now; with `only_current`, only as long as it is.
    async fn backtested(&self, job: &StoredJob, turn: &Turn, only_current: bool) -> Result<(), Halt> {
        let progress = turn.progress();
        let request = BacktestRequest::from_json(&job.task)?;
        let Some(stored) = persistently(|| self.store.find_evidence(&job.network)).await? else {
            return Err(Halt::Stop);
        };
        let (revision, digest) = (stored.network.revision, stored.digest.clone());
        let evidence = off_runtime(move || assemble::evidence(stored)).await??;
        let snapshots = evidence.snapshots().len();
        too_few(snapshots).map_or(Ok(()), Err)?;
        let plan = RecordPlan {
            thresholds: request.thresholds.values().to_vec(),
            ahead: request.ahead,
            expected: true,
            fit: FitRequest { seed: DEFAULT_SEED, ..FitRequest::default() },
        };
        let kept = self.store.list_backtest_origins(job.id).await?;
        let kept: HashSet<u64> =
            kept.into_iter().filter(|(_, evidence)| *evidence == digest).map(|(origin, _)| origin).collect();
        let shared = Arc::new((evidence, plan));
        for origin in 1..snapshots - 1 {
            let done = (origin - 1) as f64 / (snapshots - 2) as f64;
            progress.note(RECORDED * done)?;
            if kept.contains(&(origin as u64)) {
                continue;
            }
            let (shared, progress) = (shared.clone(), turn.progress());
            let made = in_background(move || {
                let (evidence, plan) = &*shared;
                record(evidence, origin, plan, &|| progress.stop().is_some())
            });
            let made = made.await.map_err(|error| stopped_short(&error))?;
            let text = record_to_json(&made.map_err(failure)?)?;
            let place = (origin as u64, text.as_str());
            let write = || self.store.put_backtest_record(job.id, place, &digest, only_current);
            stored_or_halt(persistently(write).await?)?;
        }
        let records = self.store.list_backtest_records(job.id, &digest).await?;
        let (name, id, created_at) = (job.network.clone(), job.id, kept_now());
        let origins = records.len() as u64;
        // It may take minutes, so it takes no place from short conversions.
        let document = in_background(move || {
            let records = records.iter().map(|text| record_from_json(text)).collect::<Result<Vec<_>, _>>()?;
            document(id, &name, created_at, &request, &shared.0, &records)
        });
        let document = document.await.map_err(|error| stopped_short(&error))??;
        progress.note(RECORDED)?;
        let outcome = JobOutcome::Backtest(BacktestResult { backtest: id, origins }).to_json()?;
        let made = NewBacktest {
            id,
            network: job.network.clone(),
            created_at,
            revision,
            evidence: digest,
            task: job.task.clone(),
            tag: sha256_hex(document.as_bytes()),
            document,
        };
        stored_or_halt(persistently(|| self.store.finish_backtest(&made, &outcome, only_current)).await?)
    }
}

fn stored_or_halt(write: BacktestWrite) -> Result<(), Halt> {
    match write {
        BacktestWrite::Stored => Ok(()),
        BacktestWrite::CalledOff => Err(Halt::Stop),
        BacktestWrite::Superseded => Err(Halt::Superseded),
    }
}

fn failure(error: OriginError) -> Halt {
    match error {
        OriginError::Fit(FitError::Cancelled) | OriginError::Forecast(ForecastError::Cancelled) => Halt::Stop,
        other => Halt::Failed(ServiceError::from_core(other, Duration::ZERO)),
    }
}

fn stopped_short(error: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a backtest stopped short: {error}"))
}

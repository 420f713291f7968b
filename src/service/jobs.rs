//! Jobs: work that outlasts its request and, taken up again, the process.

mod backtest;
mod board;
mod counting;
mod link_list;
mod outcome;
mod refresh;

use std::convert::Infallible;
use std::future::Future;
use std::time::{Duration, Instant};

use tokio::sync::watch;
use tokio::time::{sleep, timeout};
use tracing::{Instrument, Span, field, info_span};
use uuid::Uuid;

use super::networks::cut;
use super::{Service, ServiceError, TRACES, Thing, in_own_task};
use crate::store::{CalledOff, JobFilter, JobKind, JobStart, JobState, StoreError, StoredJob, WriteError};
pub use board::Board;
use board::Turn;
pub use link_list::LinkListTask;
pub use outcome::{
    BacktestResult, JobFailure, JobFault, JobOutcome, JobProblem, LinkListResult, PassedOver, RefreshResult,
    SkippedLines,
};

/// How often a job is begun before it is given up: one that stops the process each time must not do so for ever.
const MOST_STARTS: u64 = 3;
/// How often, and after how long at first, the end of a job is written again when the database fails.
const WRITE_TRIES: u32 = 6;
const WRITE_PAUSE: Duration = Duration::from_secs(1);
/// Time between two looks at jobs that other processes took on or are at.
const LOOK_PAUSE: Duration = Duration::from_secs(1);
/// Time between two prolongations of a claim.
const CLAIM_PAUSE: Duration = Duration::from_secs(5);
/// Most jobs taken up at one look; the next look takes up more.
const MOST_TAKEN_UP: u32 = 10_000;

/// A job as it stands.
#[derive(Debug, Clone, PartialEq)]
pub struct JobView {
    /// As stored.
    pub job: StoredJob,
    /// How far it has come, 0 to 1; none when it ended without a result.
    pub progress: Option<f64>,
    /// What came of it.
    pub outcome: Option<JobOutcome>,
}

impl Service {
    /// A job as it stands.
    ///
    /// # Errors
    /// When there is none with this id, or the database fails.
    pub async fn job(&self, id: Uuid) -> Result<JobView, ServiceError> {
        let progress = self.jobs.watch(id).map(|pulse| *pulse.borrow());
        let job = self.store.find_job(id).await?.ok_or(ServiceError::NotFound(Thing::Job))?;
        view(job, progress)
    }

    /// A job as it stands when it has ended, or after `patience`.
    ///
    /// # Errors
    /// As [`Self::job`].
    pub async fn job_after(&self, id: Uuid, patience: Duration) -> Result<JobView, ServiceError> {
        let asked = Instant::now();
        if let Some(mut pulse) = self.jobs.watch(id) {
            // Changes until the job ends; running out of patience is no failure.
            let _ = timeout(patience, async { while pulse.changed().await.is_ok() {} }).await;
        }
        // Another process may be at it.
        while self.store.is_shared() && asked.elapsed() < patience && self.job(id).await?.job.state.is_live() {
            sleep(LOOK_PAUSE.min(patience.saturating_sub(asked.elapsed()))).await;
        }
        self.job(id).await
    }

    /// Tells each time that a live job has come on; closed when it ends. None when it is not at work here.
    pub fn job_pulse(&self, id: Uuid) -> Option<watch::Receiver<f64>> {
        self.jobs.watch(id)
    }

    /// Jobs that pass the filter, newest first, and whether more follow.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_jobs(&self, mut filter: JobFilter) -> Result<(Vec<JobView>, bool), ServiceError> {
        let limit = filter.limit;
        filter.limit = limit.saturating_add(1);
        let (jobs, more) = cut(self.store.list_jobs(&filter).await?, limit);
        let progress = |id| self.jobs.watch(id).map(|pulse| *pulse.borrow());
        let views = jobs.into_iter().map(|job| {
            let progress = progress(job.id);
            view(job, progress)
        });
        Ok((views.collect::<Result<_, _>>()?, more))
    }

    /// Calls a live job off, or removes the record of one that has ended.
    ///
    /// # Errors
    /// When there is none with this id, or the database fails.
    pub async fn call_off(&self, id: Uuid) -> Result<(), ServiceError> {
        let (store, jobs) = (self.store.clone(), self.jobs.clone());
        in_own_task(async move {
            match store.call_off(id).await? {
                CalledOff::Missing => Err(ServiceError::NotFound(Thing::Job)),
                CalledOff::Removed => Ok(()),
                CalledOff::Cancelled => {
                    jobs.call_off(id);
                    Ok(())
                }
            }
        })
        .await
    }

    /// Takes up the jobs that had not ended when the last process stopped, and sweeps away what it left lying.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn resume_jobs(&self) -> Result<(), ServiceError> {
        self.check_tables().await?;
        // What is younger than an upload may take may belong to one.
        self.store.sweep_spool(self.jobs.config().link_list_time()).await?;
        if !self.store.is_shared() {
            self.store.release_claims().await?;
        }
        self.take_up_jobs().await
    }

    async fn take_up_jobs(&self) -> Result<(), ServiceError> {
        // Of a file every job is this process's; of a server the next look takes up more.
        let most = if self.store.is_shared() { MOST_TAKEN_UP } else { u32::MAX };
        for (id, kind) in self.store.claimable_jobs(most).await? {
            self.launch(id, kind);
        }
        Ok(())
    }

    /// Takes up jobs until it is told to stop: those of the last process if that is yet to be done, and now and then those that other
    /// processes on the same database took on or left.
    pub async fn share_jobs(self, mut resumed: bool, mut stop: watch::Receiver<bool>) {
        while !*stop.borrow() && (self.store.is_shared() || !resumed) {
            tokio::select! {
                told = stop.changed() => if told.is_err() { break },
                () = sleep(LOOK_PAUSE) => {
                    let taken = if resumed { self.take_up_jobs().await } else { self.resume_jobs().await };
                    match taken {
                        Ok(()) => resumed = true,
                        Err(error) => tracing::debug!(%error, "jobs that wait cannot be read; it is tried again"),
                    }
                }
            }
        }
    }

    fn launch(&self, id: Uuid, kind: JobKind) {
        // Two changes may both find the refresh that stands for them.
        let (service, Some(turn)) = (self.clone(), self.jobs.open(id)) else { return };
        let work = async move {
            if let Err(error) = service.work(id, kind, &turn).await {
                tracing::error!(%error, "the job's end could not be written; it is taken up again at the next start");
            }
        };
        let traced = info_span!(
            target: TRACES,
            "job",
            kind = kind.as_str(),
            id = %id,
            otel.status_code = field::Empty,
            error.type = field::Empty
        );
        tokio::spawn(work.instrument(traced).instrument(info_span!("job", %id)));
    }

    /// Works a job to its end, or until the process stops, unless another process is at it.
    async fn work(&self, id: Uuid, kind: JobKind, turn: &Turn) -> Result<(), ServiceError> {
        let _worker = turn.come(kind).await;
        if turn.is_stopping() {
            return Ok(());
        }
        let job = match self.store.start_job(id).await? {
            JobStart::Begun(job) => job,
            JobStart::Elsewhere => return Ok(()),
            JobStart::Over => {
                // A list that was received in vain.
                self.store.drop_spooled(id).await;
                return Ok(());
            }
        };
        let work = async {
            match job.kind {
                JobKind::LinkList => self.count_link_list(&job, turn).await,
                JobKind::Refresh => self.refresh(&job, turn).await,
                JobKind::Backtest => self.backtest(&job, turn).await,
            }
        };
        tokio::select! {
            outcome = work => outcome,
            never = self.hold_claim(id, turn) => match never {},
        }
    }

    /// Prolongs the claim on a job for as long as it is at work, and tells it to stop when the claim is lost.
    async fn hold_claim(&self, id: Uuid, turn: &Turn) -> Infallible {
        loop {
            sleep(CLAIM_PAUSE).await;
            if !self.store.is_shared() {
                continue;
            }
            match self.store.prolong_claim(id, turn.so_far()).await {
                Ok(true) => {}
                Ok(false) => self.jobs.call_off(id),
                Err(error) => tracing::warn!(%error, "the claim on a job could not be prolonged; it is tried again"),
            }
        }
    }

    async fn fail(&self, job: &StoredJob, problem: JobProblem) -> Result<(), ServiceError> {
        trace_failure(&problem);
        let outcome = JobOutcome::Problem(problem).to_json()?;
        persistently(|| self.store.fail_job(job.id, &outcome)).await?;
        Ok(())
    }
}

/// Reads or writes again, with growing pauses, while the database fails.
pub(in crate::service) async fn persistently<T, F: Future<Output = Result<T, StoreError>>>(
    mut write: impl FnMut() -> F,
) -> Result<T, StoreError> {
    for round in 0..WRITE_TRIES {
        match write().await {
            Ok(done) => return Ok(done),
            Err(error) => tracing::warn!(%error, "the database failed a job; it is tried again"),
        }
        sleep(WRITE_PAUSE * 2u32.pow(round)).await;
    }
    write().await
}

fn view(job: StoredJob, live: Option<f64>) -> Result<JobView, ServiceError> {
    let outcome = job.outcome.as_deref().map(JobOutcome::from_json).transpose()?;
    let progress = match job.state {
        JobState::Waiting => Some(0.0),
        JobState::Running => Some(live.or(job.progress).unwrap_or(0.0)),
        JobState::Succeeded => Some(1.0),
        JobState::Failed | JobState::Cancelled => None,
    };
    Ok(JobView { job, progress, outcome })
}

/// Marks the job's span as failed.
fn trace_failure(problem: &JobProblem) {
    let span = Span::current();
    span.record("otel.status_code", "ERROR");
    let code = serde_json::to_value(problem.code).unwrap_or_default();
    span.record("error.type", code.as_str().unwrap_or_default());
}

fn refused(error: WriteError) -> ServiceError {
    ServiceError::from_write(error, Thing::Job)
}

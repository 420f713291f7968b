//! Refreshing a network: its forecast by its plan, and the accounts of earlier ones, from what is stored now.

use std::time::Instant;

use jiff::Timestamp;
use tracing::info_span;
use uuid::Uuid;

use super::board::{Progress, Stop, Turn};
use super::outcome::{JobOutcome, JobProblem, RefreshResult};
use super::{MOST_STARTS, persistently, trace_failure};
use crate::evaluate::OriginRequest;
use crate::fit::FitRequest;
use crate::model::{Evidence, Questions};
use crate::service::accounts::{self, Accounts};
use crate::service::background::in_background;
use crate::service::evidence::{assemble, off_runtime};
use crate::service::inputs::{DEFAULT_SEED, ForecastInputs};
use crate::service::questions::limits_from;
use crate::service::runs::compute;
use crate::service::{NetworkName, RunOrigin, Service, ServiceError, TRACES, plan};
use crate::store::{JobState, NewRun, RefreshEnd, RefreshEnded, RefreshState, Signal, StoredJob, StoredOrigin};

/// Why a refresh came to nothing although nothing went wrong.
const SUPERSEDED: &str = "what is stored changed while it was at work; a later refresh stands for all of it";
const DONE: &str = "the latest forecast already stood on all that is stored";
const NO_PLAN: &str = "the network has no forecast_plan; store one with its settings to have forecasts made";

/// Share of the work that is done when the accounts are made.
const ACCOUNTED: f64 = 0.2;

/// What a refresh came to before it is stored.
struct Came {
    revision: u64,
    accounts: Accounts,
    /// How the network stands then, for notices.
    signals: Vec<Signal>,
    /// The forecast with the last of its dates.
    forecast: Result<(NewRun, Timestamp), NoForecast>,
}

/// Why a refresh has no forecast.
enum NoForecast {
    /// None was asked for.
    NoPlan,
    /// There is none.
    Problem(JobProblem),
}

/// Why a refresh ended early.
enum Halt {
    /// Called off, or the process stops.
    Stop,
    /// A fault of ours.
    Failed(ServiceError),
}

impl From<ServiceError> for Halt {
    fn from(error: ServiceError) -> Self {
        Self::Failed(error)
    }
}

impl From<Stop> for Halt {
    fn from(_: Stop) -> Self {
        Self::Stop
    }
}

impl Service {
    /// Starts a refresh that a change took on, unless it is at work already.
    pub(in crate::service) fn start_refresh(&self, job: Option<Uuid>) {
        if let Some(id) = job {
            self.launch(id, crate::store::JobKind::Refresh);
        }
    }

    /// Works a refresh to its end, or until the process stops.
    pub(super) async fn refresh(&self, job: &StoredJob, turn: &Turn) -> Result<(), ServiceError> {
        let found = persistently(|| self.store.find_network(&job.network)).await?;
        let Some(network) = found else { return Ok(()) };
        // Taken up again after a kill while another waits: that one stands for all of it.
        if network.refresh.is_some_and(|newest| newest.job != job.id) {
            return self.end_without(job, network.revision, SUPERSEDED, None).await;
        }
        if job.starts > MOST_STARTS {
            let again = "store the network's settings again";
            return self.give_up(job, JobProblem::interrupted(job.starts - 1, again)).await;
        }
        match self.refreshed(job, turn).await {
            Ok(Some(came)) => self.store_refresh(job, came).await,
            // The network went, and the job with it.
            Ok(None) | Err(Halt::Stop) => Ok(()),
            Err(Halt::Failed(error)) => self.give_up(job, JobProblem::refusal(&error)).await,
        }
    }

    async fn refreshed(&self, job: &StoredJob, turn: &Turn) -> Result<Option<Came>, Halt> {
        let progress = turn.progress();
        // What it stores goes after all that was stored before, whichever process made that, by whatever clock.
        persistently(|| self.store.raise_ids()).await.map_err(ServiceError::from)?;
        let found = persistently(|| self.store.find_evidence(&job.network)).await.map_err(ServiceError::from)?;
        let Some(mut stored) = found else { return Ok(None) };
        let revision = stored.network.revision;
        let plan = stored.network.settings.forecast_plan.as_deref().map(plan::from_json).transpose()?;
        let kept = std::mem::take(&mut stored.questions);
        let evidence = off_runtime(move || assemble::evidence(stored)).await?;
        let snapshots = evidence.as_ref().map(Evidence::snapshots).unwrap_or_default().to_vec();
        progress.note(0.02)?;
        let accounts = accounts::due(&self.store, &job.network, snapshots).await?;
        progress.note(ACCOUNTED)?;
        let forecast = match (plan, evidence) {
            (None, _) => Err(NoForecast::NoPlan),
            (Some(_), Err(error @ (ServiceError::NoSnapshot | ServiceError::Impossible(_)))) => {
                Err(NoForecast::Problem(JobProblem::refusal(&error)))
            }
            (Some(_), Err(error)) => return Err(error.into()),
            (Some(plan), Ok(evidence)) => {
                let latest = evidence.latest().as_of;
                let name = NetworkName::new(&job.network).map_err(|fault| ServiceError::Broken(fault.to_string()))?;
                let origin = RunOrigin { network: name, stored: StoredOrigin { revision, as_of: latest } };
                let limits = limits_from(&kept, latest)?;
                match plan.at(latest, &limits) {
                    Err(why) => Err(NoForecast::Problem(JobProblem::refusal(&ServiceError::Impossible(why)))),
                    Ok((plan, arrivals)) => {
                        let fit = FitRequest { seed: DEFAULT_SEED, ..FitRequest::default() };
                        let questions = Questions { limits, ..Questions::default() };
                        let request = OriginRequest { evidence, fit, arrivals, plan, questions };
                        self.forecast(ForecastInputs { label: None, request }, origin, progress).await?
                    }
                }
            }
        };
        let run = forecast.as_ref().ok().map(|(run, _)| run);
        let signals = self.signals(&job.network, &accounts, run).await?;
        Ok(Some(Came { revision, accounts, signals, forecast }))
    }

    async fn forecast(
        &self,
        inputs: ForecastInputs,
        origin: RunOrigin,
        progress: Progress,
    ) -> Result<Result<(NewRun, Timestamp), NoForecast>, Halt> {
        let time = self.jobs.config().refresh_time();
        let issued_to = inputs.request.plan.dates().last().copied().unwrap_or(origin.stored.as_of);
        let span = info_span!(target: TRACES, "compute");
        let work = in_background(move || {
            let begun = Instant::now();
            let cancelled = || progress.stop().is_some() || begun.elapsed() >= time;
            let run = span.in_scope(|| compute(&inputs, Some(origin), &cancelled));
            (run, progress.stop())
        });
        let (run, stop) =
            work.await.map_err(|error| ServiceError::Broken(format!("a refresh stopped short: {error}")))?;
        match (run, stop) {
            (Ok(run), _) => Ok(Ok((run, issued_to))),
            (Err(_), Some(stop)) => Err(stop.into()),
            (Err(failure), None) => match failure.into_service_error(time) {
                broken @ ServiceError::Broken(_) => Err(broken.into()),
                refusal => Ok(Err(NoForecast::Problem(JobProblem::refusal(&refusal)))),
            },
        }
    }

    async fn store_refresh(&self, job: &StoredJob, came: Came) -> Result<(), ServiceError> {
        let Came { revision, accounts, signals, forecast } = came;
        let made = accounts.made.len() as u64;
        let result = |forecast: Option<Uuid>, reason: Option<&str>| {
            let reason = reason.map(str::to_owned);
            JobOutcome::Refresh(RefreshResult { revision, forecast, accounts: made, reason }).to_json()
        };
        let (outcome, state, reason) = match &forecast {
            Ok((run, _)) => (result(Some(run.id), None)?, JobState::Succeeded, None),
            Err(NoForecast::NoPlan) => (result(None, Some(NO_PLAN))?, JobState::Succeeded, Some(NO_PLAN.to_owned())),
            Err(NoForecast::Problem(problem)) => {
                trace_failure(problem);
                (JobOutcome::Problem(problem.clone()).to_json()?, JobState::Failed, Some(problem.detail.clone()))
            }
        };
        let end = RefreshEnd {
            job: job.id,
            network: &job.network,
            revision,
            forecast: forecast.as_ref().ok().map(|(run, issued_to)| (run, *issued_to)),
            reason: reason.as_deref(),
            accounts: &accounts.made,
            withdrawn: &accounts.withdrawn,
            signals: &signals,
            end: (state, &outcome),
        };
        match persistently(|| self.store.finish_refresh(&end)).await? {
            RefreshEnded::Stored(redo) => {
                self.wake_sender();
                self.start_backtest(redo);
                Ok(())
            }
            RefreshEnded::CalledOff => Ok(()),
            // Where a later refresh stands for it, it is that one that says how things stand; without a plan none follows.
            RefreshEnded::Superseded => {
                let stands = Some((RefreshState::Outdated, Some(NO_PLAN)));
                self.end_without(job, revision, SUPERSEDED, stands).await
            }
            RefreshEnded::Done => self.end_without(job, revision, DONE, Some((RefreshState::Current, None))).await,
        }
    }

    /// Ends a refresh that has nothing to store.
    async fn end_without(
        &self,
        job: &StoredJob,
        revision: u64,
        reason: &str,
        stands: Option<(RefreshState, Option<&str>)>,
    ) -> Result<(), ServiceError> {
        let outcome = RefreshResult { revision, forecast: None, accounts: 0, reason: Some(reason.to_owned()) };
        let outcome = JobOutcome::Refresh(outcome).to_json()?;
        let end = (JobState::Succeeded, outcome.as_str());
        let redo = persistently(|| self.store.end_refresh(job.id, &job.network, end, stands)).await?;
        self.start_backtest(redo);
        Ok(())
    }

    /// Ends a refresh that could not be done; the forecast before stays the latest.
    async fn give_up(&self, job: &StoredJob, problem: JobProblem) -> Result<(), ServiceError> {
        trace_failure(&problem);
        let reason = problem.detail.clone();
        let outcome = JobOutcome::Problem(problem).to_json()?;
        let end = (JobState::Failed, outcome.as_str());
        let stands = Some((RefreshState::Outdated, Some(reason.as_str())));
        let redo = persistently(|| self.store.end_refresh(job.id, &job.network, end, stands)).await?;
        self.start_backtest(redo);
        Ok(())
    }
}

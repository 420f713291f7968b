//! Taking on, counting and storing a network's link list.

use uuid::Uuid;

use super::board::Turn;
use super::link_list::{LinkListTask, Stopped, Told, count};
use super::outcome::{JobOutcome, JobProblem};
use super::{MOST_STARTS, persistently, refused};
use crate::service::background::in_background;
use crate::service::{NetworkName, Service, ServiceError, in_own_task};
use crate::store::{JobKind, StoredJob, Upload, WriteError, next_id};

impl Service {
    /// Begins to receive a network's link list.
    ///
    /// # Errors
    /// When there is no such network, it has a live job, or the database fails.
    pub async fn begin_link_list(&self, name: &NetworkName) -> Result<Upload, ServiceError> {
        self.check_tables().await?;
        self.store.check_idle(name.as_str(), JobKind::LinkList).await.map_err(refused)?;
        Ok(self.store.begin_upload().await?)
    }

    /// Takes on a link list that was received in full; returns the job's id. It is on disk when this returns.
    ///
    /// # Errors
    /// As [`Self::begin_link_list`]; when as many jobs as configured wait.
    pub async fn take_link_list(
        &self,
        name: NetworkName,
        task: LinkListTask,
        list: Upload,
    ) -> Result<Uuid, ServiceError> {
        let service = self.clone();
        in_own_task(async move {
            let kind = service.network(&name).await?.settings.degree_kind;
            let task = task.to_json(kind, list.bytes())?;
            let id = next_id();
            list.keep(id).await?;
            let job = (JobKind::LinkList, name.as_str());
            let taken = service.store.insert_job(id, job, &task, service.jobs.most_live()).await;
            if let Err(error) = taken {
                service.store.drop_spooled(id).await;
                return Err(refused(error));
            }
            service.launch(id, JobKind::LinkList);
            Ok(id)
        })
        .await
    }

    /// Counts the list of a job to its end, or until the process stops.
    pub(super) async fn count_link_list(&self, job: &StoredJob, turn: &Turn) -> Result<(), ServiceError> {
        match self.told(job, turn).await {
            Ok(told) => self.finish_link_list(job, &told).await?,
            Err(Stopped::Process) => return Ok(()),
            Err(Stopped::CalledOff) => {}
            Err(Stopped::Failed(problem)) => self.fail(job, problem).await?,
        }
        self.store.drop_spooled(job.id).await;
        Ok(())
    }

    /// What the list of a job tells.
    async fn told(&self, job: &StoredJob, turn: &Turn) -> Result<Told, Stopped> {
        if job.starts > MOST_STARTS {
            return Err(Stopped::Failed(JobProblem::interrupted(job.starts - 1, "send the list again")));
        }
        let list = persistently(|| self.store.spooled(job.id)).await;
        let list = list.map_err(|error| Stopped::broken(error.to_string()))?;
        let (task, progress) = (job.task.clone(), turn.progress());
        let most_nodes = self.jobs.config().link_list_nodes;
        let counting = in_background(move || count(list.path(), &task, most_nodes, &progress));
        match counting.await {
            Ok(told) => told,
            Err(error) => Err(Stopped::broken(format!("counting stopped short: {error}"))),
        }
    }

    async fn finish_link_list(&self, job: &StoredJob, told: &Told) -> Result<(), ServiceError> {
        let outcome = JobOutcome::Result(told.result.clone()).to_json()?;
        let written = persistently(|| async {
            match self.store.finish_link_list(job.id, &job.network, &told.derived, &self.caps, &outcome).await {
                Ok(stored) => {
                    self.start_refresh(stored.flatten());
                    Ok(None)
                }
                Err(WriteError::Clash(clash)) => Ok(Some(JobProblem::clash(&clash))),
                // The network went, and the job with it.
                Err(WriteError::NoNetwork | WriteError::Missing | WriteError::Mismatch) => Ok(None),
                Err(WriteError::Store(error)) => Err(error),
            }
        });
        match written.await? {
            Some(problem) => self.fail(job, problem).await,
            None => Ok(()),
        }
    }
}

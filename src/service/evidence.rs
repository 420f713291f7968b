//! What is stored of tracked networks: snapshots, transitions, link events; and all of it as evidence for a run.

pub(super) mod assemble;
pub(super) mod encode;

use jiff::Timestamp;
use tokio::sync::OwnedSemaphorePermit;
use tokio::time::timeout;

use super::networks::cut;
use super::questions::limits_from;
use super::{NetworkName, Service, ServiceError, Thing, in_own_task, plan};
use crate::model::{Evidence, Limit, LinkEvents, Snapshot, StandingPlan, Transitions};
use crate::store::{
    QuestionKind, SnapshotSummary, StoredLinkEvents, StoredOrigin, StoredSnapshot, StoredTransitions,
    TransitionsSummary, WriteError,
};

/// What a write answers: the line of what is stored now, and whether nothing stood there before.
pub type Written<T> = Result<(T, bool), ServiceError>;

/// All that is stored of a network.
#[derive(Debug)]
pub struct NetworkEvidence {
    /// What is known.
    pub evidence: Evidence,
    /// What is asked of its forecasts.
    pub plan: Option<StandingPlan>,
    /// The limits kept with it that a run from it reaches.
    pub limits: Vec<Limit>,
    /// Scenarios kept with it: name and body.
    pub scenarios: Vec<(String, String)>,
    /// What a run from it stands on.
    pub origin: RunOrigin,
    /// The place it takes in memory: to be kept until the run is made.
    pub place: OwnedSemaphorePermit,
}

/// What a run of a tracked network stands on.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RunOrigin {
    /// The network.
    pub network: NetworkName,
    /// The state it was in.
    pub stored: StoredOrigin,
}

impl Service {
    /// Stores a snapshot. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, the counts clash with stored ones, a cap is reached, or the
    /// database fails.
    pub async fn put_snapshot(
        &self,
        name: NetworkName,
        snapshot: Snapshot,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<SnapshotSummary> {
        self.check_tables().await?;
        let stored = encoded(move || encode::snapshot(&snapshot)).await?;
        let service = self.clone();
        in_own_task(async move {
            let change = service.store.put_snapshot(name.as_str(), &stored, &service.caps, allows).await;
            let change = change.map_err(refused(Thing::Snapshot))?;
            service.start_refresh(change.refresh);
            let mut summary = stored.summary;
            summary.updated_at = change.stands_since.unwrap_or(summary.updated_at);
            Ok((summary, change.made))
        })
        .await
    }

    /// A snapshot.
    ///
    /// # Errors
    /// When there is no such network or snapshot, or the database fails.
    pub async fn snapshot(&self, name: &NetworkName, as_of: Timestamp) -> Result<StoredSnapshot, ServiceError> {
        let found = self.store.find_snapshot(name.as_str(), as_of).await?;
        self.found(name, found, Thing::Snapshot).await
    }

    /// Snapshots later than `after`, oldest first, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn snapshots(
        &self,
        name: &NetworkName,
        after: Option<Timestamp>,
        limit: u32,
    ) -> Result<(Vec<SnapshotSummary>, bool), ServiceError> {
        self.network(name).await?;
        Ok(cut(self.store.list_snapshots(name.as_str(), after, limit.saturating_add(1)).await?, limit))
    }

    /// Deletes a snapshot. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or snapshot, `allows` refuses, or the database fails.
    pub async fn delete_snapshot(
        &self,
        name: NetworkName,
        as_of: Timestamp,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let service = self.clone();
        in_own_task(async move {
            let refresh = service.store.delete_snapshot(name.as_str(), as_of, allows).await;
            service.start_refresh(refresh.map_err(refused(Thing::Snapshot))?);
            Ok(())
        })
        .await
    }

    /// Stores a table of transitions. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// As [`Self::put_snapshot`]; when the period overlaps a stored one.
    pub async fn put_transitions(
        &self,
        name: NetworkName,
        table: Transitions,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<TransitionsSummary> {
        self.check_tables().await?;
        let (stored, ends) = encoded(move || encode::transitions(&table)).await?;
        let service = self.clone();
        in_own_task(async move {
            let change = service.store.put_transitions(name.as_str(), &stored, &ends, &service.caps, allows).await;
            let change = change.map_err(refused(Thing::Transitions))?;
            service.start_refresh(change.refresh);
            let mut summary = stored.summary;
            summary.updated_at = change.stands_since.unwrap_or(summary.updated_at);
            Ok((summary, change.made))
        })
        .await
    }

    /// A table of transitions.
    ///
    /// # Errors
    /// When there is no such network or table, or the database fails.
    pub async fn transitions(
        &self,
        name: &NetworkName,
        (from, to): (Timestamp, Timestamp),
    ) -> Result<StoredTransitions, ServiceError> {
        let found = self.store.find_transitions(name.as_str(), from, to).await?;
        self.found(name, found, Thing::Transitions).await
    }

    /// Tables of transitions that start later than `after`, oldest first, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn transitions_list(
        &self,
        name: &NetworkName,
        after: Option<Timestamp>,
        limit: u32,
    ) -> Result<(Vec<TransitionsSummary>, bool), ServiceError> {
        self.network(name).await?;
        Ok(cut(self.store.list_transitions(name.as_str(), after, limit.saturating_add(1)).await?, limit))
    }

    /// Deletes a table of transitions. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or table, `allows` refuses, or the database fails.
    pub async fn delete_transitions(
        &self,
        name: NetworkName,
        dates: (Timestamp, Timestamp),
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let service = self.clone();
        in_own_task(async move {
            let refresh = service.store.delete_transitions(name.as_str(), dates, allows).await;
            service.start_refresh(refresh.map_err(refused(Thing::Transitions))?);
            Ok(())
        })
        .await
    }

    /// Stores a network's attachment statistics. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, a cap is reached, or the database fails.
    pub async fn put_link_events(
        &self,
        name: NetworkName,
        events: LinkEvents,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<StoredLinkEvents> {
        self.check_tables().await?;
        let mut stored = encoded(move || encode::link_events(&events)).await?;
        let service = self.clone();
        in_own_task(async move {
            let change = service.store.put_link_events(name.as_str(), &stored, &service.caps, allows).await;
            let change = change.map_err(refused(Thing::LinkEvents))?;
            service.start_refresh(change.refresh);
            stored.updated_at = change.stands_since.unwrap_or(stored.updated_at);
            Ok((stored, change.made))
        })
        .await
    }

    /// A network's attachment statistics.
    ///
    /// # Errors
    /// When there is no such network, it has none, or the database fails.
    pub async fn link_events(&self, name: &NetworkName) -> Result<StoredLinkEvents, ServiceError> {
        let found = self.store.find_link_events(name.as_str()).await?;
        self.found(name, found, Thing::LinkEvents).await
    }

    /// Deletes a network's attachment statistics. `allows` is asked about their validator.
    ///
    /// # Errors
    /// When there is no such network, it has none, `allows` refuses, or the database fails.
    pub async fn delete_link_events(
        &self,
        name: NetworkName,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let service = self.clone();
        in_own_task(async move {
            let refresh = service.store.delete_link_events(name.as_str(), allows).await;
            service.start_refresh(refresh.map_err(refused(Thing::LinkEvents))?);
            Ok(())
        })
        .await
    }

    /// All that is stored of a network, for a run.
    ///
    /// # Errors
    /// When there is no such network, nothing is stored that a run could start from, no place is free within the time
    /// budget, or the database fails.
    pub async fn evidence(&self, name: &NetworkName) -> Result<NetworkEvidence, ServiceError> {
        self.network(name).await?;
        let busy = || ServiceError::Busy { wait: self.cpu.backlog() };
        let _waiting = self.evidence_queue.clone().try_acquire_owned().map_err(|_| busy())?;
        let budget = self.cpu.budget();
        let place = match timeout(budget, self.evidence_places.clone().acquire_owned()).await {
            Ok(Ok(place)) => place,
            Ok(Err(_)) => return Err(busy()),
            Err(_) => return Err(ServiceError::TooSlow { budget }),
        };
        let found = self.store.find_evidence(name.as_str()).await?;
        let mut stored = found.ok_or(ServiceError::NotFound(Thing::Network))?;
        let plan = stored.network.settings.forecast_plan.as_deref().map(plan::from_json).transpose()?;
        let revision = stored.network.revision;
        let questions = std::mem::take(&mut stored.questions);
        let evidence = off_runtime(move || assemble::evidence(stored)).await??;
        let limits = limits_from(&questions, evidence.latest().as_of)?;
        let scenarios = questions.into_iter().filter(|question| question.kind == QuestionKind::Scenario);
        let scenarios = scenarios.map(|question| (question.name, question.body)).collect();
        let origin =
            RunOrigin { network: name.clone(), stored: StoredOrigin { revision, as_of: evidence.latest().as_of } };
        Ok(NetworkEvidence { evidence, plan, limits, scenarios, origin, place })
    }

    /// What was found, or whether the network or the thing under it is missing.
    async fn found<T>(&self, name: &NetworkName, found: Option<T>, thing: Thing) -> Result<T, ServiceError> {
        match found {
            Some(found) => Ok(found),
            None => self.network(name).await.and(Err(ServiceError::NotFound(thing))),
        }
    }
}

fn refused(thing: Thing) -> impl FnOnce(WriteError) -> ServiceError {
    move |error| ServiceError::from_write(error, thing)
}

/// Large counts take a while to write as JSON.
async fn encoded<T: Send + 'static>(
    work: impl FnOnce() -> Result<T, serde_json::Error> + Send + 'static,
) -> Result<T, ServiceError> {
    off_runtime(work).await?.map_err(|error| ServiceError::Broken(error.to_string()))
}

pub(super) async fn off_runtime<T: Send + 'static>(
    work: impl FnOnce() -> T + Send + 'static,
) -> Result<T, ServiceError> {
    let done = super::background::converted(work).await;
    done.map_err(|error| ServiceError::Broken(format!("a conversion stopped short: {error}")))
}

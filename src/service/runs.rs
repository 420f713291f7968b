//! Runs: make one, read it back, list, delete.

use jiff::Timestamp;
use serde::Serialize;
use tokio::try_join;
use uuid::Uuid;

use super::compute::{Question, inputs_digest};
use super::inputs::sha256_hex;
use super::{
    ENGINE, KeyClaim, RunFilter, RunKind, RunOrigin, RunSummary, Service, ServiceError, StoredRun, Thing, in_own_task,
};
use crate::evaluate::OriginError;
use crate::store::{Inserted, NewRun, kept_now, next_id};

/// A run's document: its head in front of its answer.
#[derive(Serialize)]
struct Document<'a, A> {
    id: Uuid,
    created_at: String,
    network: Option<&'a str>,
    #[serde(flatten)]
    answer: &'a A,
}

impl Service {
    /// Computes an answer and keeps it, as a run of the network of `origin` when it stands on what is stored of one; or finds the run
    /// that the same key and body led to before. When this returns a run, it is on disk.
    ///
    /// # Errors
    /// When the inputs have no answer, the key belongs to another body, there is no free worker in time, or the
    /// database fails.
    pub async fn create<Q: Question>(
        &self,
        question: Q,
        origin: Option<RunOrigin>,
        claim: Option<KeyClaim>,
    ) -> Result<StoredRun, ServiceError> {
        if let Some(claim) = &claim {
            self.check_tables().await?;
            if let Some(earlier) = self.store.find_claim(Q::KIND, claim).await? {
                return replayed(earlier);
            }
        }
        if let Some(refusal) = question.refusal() {
            return Err(ServiceError::from_core(refusal, self.cpu.budget()));
        }
        let budget = self.cpu.budget();
        let computed = self.cpu.run(move |cancelled| compute(&question, origin, cancelled));
        // What could not be kept is not computed to its end.
        let (run, ()) = try_join!(computed, self.check_tables())?;
        let run = run.map_err(|failure| failure.into_service_error(budget))?;
        let store = self.store.clone();
        in_own_task(async move {
            match store.insert_run(&run, claim.as_ref()).await? {
                Inserted::Kept => {
                    Ok(StoredRun { id: run.id, created_at: run.created_at, tag: run.tag, document: run.document })
                }
                earlier => replayed(earlier),
            }
        })
        .await
    }

    /// Computes an answer within the time budget and keeps nothing.
    ///
    /// # Errors
    /// When the inputs have no answer, or there is no free worker in time.
    pub async fn answer<Q: Question>(&self, question: Q) -> Result<Q::Answer, ServiceError> {
        if let Some(refusal) = question.refusal() {
            return Err(ServiceError::from_core(refusal, self.cpu.budget()));
        }
        let budget = self.cpu.budget();
        let answered = self.cpu.run(move |cancelled| {
            let canonical = question.canonical().map_err(|error| Failure::Unwritable(error.to_string()))?;
            question.answer(inputs_digest(&canonical), cancelled).map_err(Failure::Unanswered)
        });
        answered.await?.map_err(|failure| failure.into_service_error(budget))
    }

    /// The run with this id.
    ///
    /// # Errors
    /// [`ServiceError::NotFound`], or when the database fails.
    pub async fn run(&self, kind: RunKind, id: Uuid) -> Result<StoredRun, ServiceError> {
        self.store.find_run(kind, id).await?.ok_or(ServiceError::NotFound(Thing::Run))
    }

    /// Runs that pass the filter, newest first, and whether more follow.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list(&self, kind: RunKind, mut filter: RunFilter) -> Result<(Vec<RunSummary>, bool), ServiceError> {
        let wanted = filter.limit as usize;
        filter.limit = filter.limit.saturating_add(1);
        let mut runs = self.store.list_runs(kind, &filter).await?;
        let more = runs.len() > wanted;
        runs.truncate(wanted);
        Ok((runs, more))
    }

    /// Deletes a run; `matches` is asked about its validator first.
    ///
    /// # Errors
    /// [`ServiceError::NotFound`], [`ServiceError::TagMismatch`], or when the database fails.
    pub async fn delete(
        &self,
        kind: RunKind,
        id: Uuid,
        matches: impl FnOnce(&str) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        // A run never changes, so nothing can come between looking at its validator and deleting it but its deletion.
        let tag = self.store.find_tag(kind, id).await?.ok_or(ServiceError::NotFound(Thing::Run))?;
        if !matches(&tag) {
            return Err(ServiceError::TagMismatch);
        }
        let store = self.store.clone();
        in_own_task(async move {
            if store.delete_run(kind, id).await? { Ok(()) } else { Err(ServiceError::NotFound(Thing::Run)) }
        })
        .await
    }
}

/// Why a computation gave no run to keep.
pub(super) enum Failure {
    Unanswered(OriginError),
    Unwritable(String),
}

impl Failure {
    pub(super) fn into_service_error(self, budget: std::time::Duration) -> ServiceError {
        match self {
            Self::Unanswered(unanswered) => ServiceError::from_core(unanswered, budget),
            Self::Unwritable(error) => ServiceError::Broken(format!("the answer cannot be written: {error}")),
        }
    }
}

/// Computes the answer to a question as a run to keep.
pub(super) fn compute<Q: Question>(
    question: &Q,
    origin: Option<RunOrigin>,
    cancelled: &dyn Fn() -> bool,
) -> Result<NewRun, Failure> {
    let inputs = question.canonical().map_err(|error| Failure::Unwritable(error.to_string()))?;
    let digest = inputs_digest(&inputs);
    let answer = question.answer(digest.clone(), cancelled).map_err(Failure::Unanswered)?;
    let id = next_id();
    // Read back from the id, so that the order of ids and the order of times are one. The clock where it went back since: ids
    // stay above earlier ones.
    let made_at = id
        .get_timestamp()
        .and_then(|time| {
            let (seconds, nanoseconds) = time.to_unix();
            Timestamp::new(i64::try_from(seconds).ok()?, i32::try_from(nanoseconds).ok()?).ok()
        })
        .unwrap_or_else(kept_now);
    let created_at = made_at.min(kept_now());
    let document = Document {
        id,
        created_at: created_at.to_string(),
        network: origin.as_ref().map(|origin| origin.network.as_str()),
        answer: &answer,
    };
    let document = serde_json::to_string(&document)
        .map_err(|error| Failure::Unwritable(format!("{error}: {}", place_of_no_number(&answer))))?;
    Ok(NewRun {
        id,
        kind: Q::KIND,
        network: origin.as_ref().map(|origin| origin.network.as_str().to_owned()),
        label: question.label().map(|label| label.as_str().to_owned()),
        created_at,
        engine: ENGINE,
        seed: question.seed(),
        inputs_digest: digest,
        tag: sha256_hex(document.as_bytes()),
        document,
        inputs,
        stored: origin.map(|origin| origin.stored),
    })
}

/// Where in an answer a number is not finite: the text around the first such place.
fn place_of_no_number(answer: &impl std::fmt::Debug) -> String {
    const CONTEXT_CHARS: usize = 200;
    let text = format!("{answer:?}");
    let first = ["(NaN)", "(inf)", "(-inf)"].iter().filter_map(|sign| text.find(sign)).min().unwrap_or(0);
    let before = text.get(..first).unwrap_or_default();
    let start = before.char_indices().rev().nth(CONTEXT_CHARS).map_or(0, |(at, _)| at);
    text.get(start..).unwrap_or_default().chars().take(CONTEXT_CHARS + 20).collect()
}

fn replayed(earlier: Inserted) -> Result<StoredRun, ServiceError> {
    match earlier {
        Inserted::Replayed(run) => Ok(run),
        Inserted::KeyTaken => Err(ServiceError::KeyTaken),
        Inserted::Kept => Err(ServiceError::Broken("a kept run came back as an earlier one".into())),
    }
}

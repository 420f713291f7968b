//! What a link list told, in place of all that was stored of its network.

use uuid::Uuid;

use super::jobs::{JobState, end};
use super::writes::{Caps, Clash, WriteError};
use super::{EndTags, Store, StoredLinkEvents, StoredSnapshot, StoredTransitions, link_events, snapshots, transitions};
use crate::model::DegreeKind;

/// Everything that a link list tells of a network.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct DerivedEvidence {
    /// What its degrees count.
    pub kind: DegreeKind,
    /// Snapshots.
    pub snapshots: Vec<StoredSnapshot>,
    /// Transitions with the tags of their ends.
    pub transitions: Vec<(StoredTransitions, EndTags)>,
    /// Attachment statistics.
    pub link_events: Option<StoredLinkEvents>,
}

impl DerivedEvidence {
    fn rows(&self) -> u64 {
        let snapshots = self.snapshots.iter().map(|snapshot| snapshot.summary.rows);
        let transitions = self.transitions.iter().map(|(table, _)| table.summary.rows);
        let events = self.link_events.iter().map(|events| events.rows);
        snapshots.chain(transitions).chain(events).sum()
    }
}

impl Store {
    /// Puts what a job derived in place of all evidence of its network and ends the job, in one transaction; false, and
    /// nothing is changed, when the job was called off before.
    ///
    /// # Errors
    /// When the network's degrees count something else by now, a cap is reached, or the database fails.
    pub async fn finish_link_list(
        &self,
        job: Uuid,
        network: &str,
        derived: &DerivedEvidence,
        caps: &Caps,
        outcome: &str,
    ) -> Result<bool, WriteError> {
        if derived.rows() > caps.rows {
            return Err(Clash::TooManyRows { total: derived.rows(), most: caps.rows }.into());
        }
        let mut transaction = self.begin().await?;
        // First: a job that was called off, by itself or with its network, must not touch anything.
        if !end(&mut transaction, job, JobState::Succeeded, Some(outcome)).await? {
            return Ok(false);
        }
        let stored = super::networks::find(&mut transaction, network).await?.ok_or(WriteError::NoNetwork)?;
        if stored.settings.degree_kind != derived.kind {
            return Err(Clash::DegreeKind { stored: stored.settings.degree_kind }.into());
        }
        for delete in [
            "DELETE FROM snapshots WHERE network = $1",
            "DELETE FROM transitions WHERE network = $1",
            "DELETE FROM link_events WHERE network = $1",
        ] {
            sqlx::query(delete).bind(network).execute(&mut *transaction).await?;
        }
        for snapshot in &derived.snapshots {
            snapshots::insert(&mut transaction, network, snapshot).await?;
        }
        for (table, ends) in &derived.transitions {
            transitions::insert(&mut transaction, network, table, ends).await?;
        }
        if let Some(events) = &derived.link_events {
            link_events::insert(&mut transaction, network, events).await?;
        }
        self.commit(transaction).await?;
        Ok(true)
    }
}

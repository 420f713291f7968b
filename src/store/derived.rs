//! What a link list told, in place of all that was stored of its network.

use std::collections::HashSet;

use jiff::Timestamp;

use uuid::Uuid;

use super::columns::{date, unsigned};
use super::jobs::{JobState, end};
use super::refreshes::{changed, corrected};
use super::statement::{Connection, query};
use super::writes::{Caps, Clash, Scope, WriteError};
use super::{
    EndTags, Store, StoreError, StoredLinkEvents, StoredSnapshot, StoredTransitions, link_events, snapshots,
    transitions,
};
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

    /// The earliest revision of counts that stand now and are not among these; the digests of snapshots and of transitions
    /// are of different things and never the same.
    fn first_replaced(&self, standing: &[Standing]) -> Option<u64> {
        let snapshots = self.snapshots.iter().map(|snapshot| (snapshot.summary.as_of, snapshot.summary.tag.as_str()));
        let transitions = self.transitions.iter().map(|(table, _)| (table.summary.from, table.summary.tag.as_str()));
        let kept: HashSet<_> = snapshots.chain(transitions).collect();
        standing.iter().filter(|stands| !kept.contains(&(stands.date, stands.tag.as_str()))).map(|s| s.revision).min()
    }
}

impl Store {
    /// Puts what a job derived in place of all evidence of its network and ends the job, in one transaction; with the refresh
    /// that was taken on. None, and nothing is changed, when the job was called off before.
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
    ) -> Result<Option<Option<Uuid>>, WriteError> {
        if derived.rows() > caps.rows {
            return Err(Clash::TooManyRows { total: derived.rows(), most: caps.rows }.into());
        }
        let mut transaction = self.begin(Scope::Network(network)).await?;
        // First: a job that was called off, by itself or with its network, must not touch anything.
        if !end(&mut transaction, job, JobState::Succeeded, Some(outcome)).await? {
            return Ok(None);
        }
        let stored = super::networks::find(&mut transaction, network).await?.ok_or(WriteError::NoNetwork)?;
        if stored.settings.degree_kind != derived.kind {
            return Err(Clash::DegreeKind { stored: stored.settings.degree_kind }.into());
        }
        let standing = standing(&mut transaction, network).await?;
        if let Some(revision) = derived.first_replaced(&standing) {
            corrected(&mut transaction, network, revision).await?;
        }
        let (revision, refresh) = changed(&mut transaction, network).await?;
        // Counts that stay as they were keep their revision: no run that stands on them is marked.
        let since = |date: Timestamp, tag: &str| {
            standing.iter().find(|kept| kept.date == date && kept.tag == tag).map_or(revision, |kept| kept.revision)
        };
        for delete in [
            "DELETE FROM snapshots WHERE network = $1",
            "DELETE FROM transitions WHERE network = $1",
            "DELETE FROM link_events WHERE network = $1",
        ] {
            query(delete).bind(network).execute(&mut transaction).await?;
        }
        for snapshot in &derived.snapshots {
            let since = since(snapshot.summary.as_of, &snapshot.summary.tag);
            snapshots::insert(&mut transaction, network, snapshot, since).await?;
        }
        for (table, ends) in &derived.transitions {
            let since = since(table.summary.from, &table.summary.tag);
            transitions::insert(&mut transaction, network, (table, ends), since).await?;
        }
        if let Some(events) = &derived.link_events {
            link_events::insert(&mut transaction, network, events).await?;
        }
        self.commit(transaction).await?;
        Ok(Some(refresh))
    }
}

/// Counts that stand under a date, of a snapshot or of transitions that start there.
struct Standing {
    date: Timestamp,
    tag: String,
    revision: u64,
}

async fn standing(connection: &mut Connection, network: &str) -> Result<Vec<Standing>, StoreError> {
    let rows: Vec<(String, String, i64)> = query(
        "SELECT as_of, tag, revision FROM snapshots WHERE network = $1 \
         UNION ALL SELECT starts_at, tag, revision FROM transitions WHERE network = $1",
    )
    .bind(network)
    .fetch_all(connection)
    .await?;
    let standing = |(at, tag, revision): (String, String, i64)| {
        Ok(Standing { date: date(&at)?, tag, revision: unsigned("revision", revision)? })
    };
    rows.into_iter().map(standing).collect()
}

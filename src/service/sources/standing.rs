//! How a source's runs fare, in figures and in words.

use jiff::Timestamp;
use serde::Serialize;
use utoipa::ToSchema;

use super::Sources;
use crate::service::{ServiceError, date_text};
use crate::store::StoredSource;

/// A source and how its runs fare.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct SourceAnswer {
    /// Name of the database.
    #[schema(examples("links"))]
    pub database: String,
    /// The query.
    pub query: String,
    /// Time from one run to the next, ISO 8601.
    #[schema(examples("P1D"))]
    pub every: String,
    /// What due times are counted from, RFC 3339.
    #[schema(format = DateTime)]
    pub starts_at: String,
    /// Longest time that the query may take, seconds.
    pub timeout_seconds: u64,
    /// How its runs fare, in a word.
    pub state: SourceState,
    /// In words, and what to do where something is wrong.
    pub detail: String,
    /// When the next run is due, RFC 3339; null while one is at work.
    #[schema(format = DateTime)]
    pub next_run_at: Option<String>,
    /// Runs that failed since the last that did not.
    pub failures: u64,
    /// The last run that stored a snapshot.
    pub last_success: Option<SourceSuccess>,
    /// The last run that failed.
    pub last_failure: Option<SourceFailure>,
}

/// How a source's runs fare, in a word.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum SourceState {
    /// The next run waits for its time.
    Scheduled,
    /// A run is at work.
    Running,
    /// The last run failed; the next is due after a pause.
    Failing,
    /// Its database is not among those of this service any more: nothing is run.
    NotListed,
}

/// A run that stored a snapshot.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct SourceSuccess {
    /// When it ended, RFC 3339.
    #[schema(format = DateTime)]
    pub at: String,
    /// Date of the snapshot: when its query began.
    #[schema(examples("2026-12-01T03:00:00Z"))]
    pub snapshot: String,
}

/// A run that failed.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct SourceFailure {
    /// When it ended, RFC 3339.
    #[schema(format = DateTime)]
    pub at: String,
    /// Why.
    pub reason: String,
}

/// A source, how it fares, and what tells this state from another.
#[derive(Debug, Clone)]
pub struct SourceStanding {
    /// The source.
    pub answer: SourceAnswer,
    /// Validator of the source itself, however its runs fare.
    pub tag: String,
    /// When the source was last stored.
    pub updated_at: Timestamp,
    /// Runs that have ended.
    pub ended: u64,
}

impl Sources {
    /// How a source fares.
    pub(super) fn standing(&self, stored: StoredSource) -> SourceStanding {
        let StoredSource { source, due_at, run, ended, failures, succeeded, failed } = stored;
        let refusal = self.refusal(&source.database);
        let failure = failed.as_ref().map_or("", |(_, why)| why.as_str());
        let (state, detail) = in_words(refusal.as_ref(), run.is_some(), failures, failure);
        let next_run_at = (run.is_none() && refusal.is_none()).then(|| due_at.to_string());
        SourceStanding {
            answer: SourceAnswer {
                state,
                detail,
                next_run_at,
                failures,
                database: source.database,
                query: source.query,
                every: source.every,
                starts_at: source.starts_at.to_string(),
                timeout_seconds: source.timeout_seconds,
                last_success: succeeded
                    .map(|(at, snapshot)| SourceSuccess { at: at.to_string(), snapshot: date_text(snapshot) }),
                last_failure: failed.map(|(at, reason)| SourceFailure { at: at.to_string(), reason }),
            },
            tag: source.tag,
            updated_at: source.updated_at,
            ended,
        }
    }
}

fn in_words(refusal: Option<&ServiceError>, running: bool, failures: u64, failure: &str) -> (SourceState, String) {
    match refusal {
        Some(refusal) => (SourceState::NotListed, format!("nothing is run: {refusal}")),
        None if running => (SourceState::Running, "a run is at work".to_owned()),
        None if failures > 0 => {
            let detail = format!(
                "the last {} failed, the last because: {failure}. It is tried again after a pause that grows; POST to the source's \
                 runs to try at once",
                if failures == 1 { "run".to_owned() } else { format!("{failures} runs") }
            );
            (SourceState::Failing, detail)
        }
        None => (SourceState::Scheduled, "the next run waits for its time".to_owned()),
    }
}

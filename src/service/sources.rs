//! Sources: queries in databases of the operator's whose answers are snapshots.

mod runner;
mod schedule;
mod standing;

use std::sync::Arc;
use std::time::Duration;

use jiff::{Span, Timestamp};
use serde::Serialize;
use tokio::sync::Notify;
use tokio::time::{Instant, sleep};

use super::{NetworkName, Service, ServiceError, Thing, in_own_task, sha256_hex};
use crate::config::{LimitsConfig, SourcesConfig};
use crate::store::{NewSource, kept_now};

pub use standing::{SourceAnswer, SourceFailure, SourceStanding, SourceState, SourceSuccess};

/// Time that a query may take where the source does not say, seconds.
pub const DEFAULT_TIMEOUT_SECONDS: u64 = 60;
/// Longest query, characters.
pub const MAX_QUERY_CHARS: usize = 20_000;
/// Time between two looks at a run that a request waits for.
const LOOK_PAUSE: Duration = Duration::from_millis(100);

/// What all sources share.
#[derive(Debug, Clone)]
pub struct Sources {
    config: Arc<SourcesConfig>,
    /// Most rows of an answer.
    most_rows: usize,
    /// Tells the runner that a run may be due.
    wake: Arc<Notify>,
}

/// A source as it is asked for.
#[derive(Debug, Clone)]
pub struct SourceTerms {
    /// Name of the database.
    pub database: String,
    /// The query.
    pub query: String,
    /// Time from one run to the next.
    pub every: Span,
    /// When the first run is due, and what later ones are counted from; now, when left out.
    pub starts_at: Option<Timestamp>,
    /// Longest time that the query may take.
    pub timeout_seconds: u64,
}

/// What came of a run that was asked for.
#[derive(Debug, Clone)]
pub enum AskedRun {
    /// It has stored a snapshot.
    Succeeded(SourceStanding),
    /// It has not ended yet.
    Goes(SourceStanding),
}

impl Sources {
    /// By these settings.
    pub fn new(config: &SourcesConfig, limits: &LimitsConfig) -> Self {
        Self { config: Arc::new(config.clone()), most_rows: limits.degree_counts, wake: Arc::new(Notify::new()) }
    }

    /// Why a source would not be run.
    fn refusal(&self, database: &str) -> Option<ServiceError> {
        if self.config.databases.is_empty() {
            return Some(ServiceError::SourcesOff);
        }
        let known = || self.config.databases.iter().map(|database| database.name().to_owned()).collect();
        self.config.database(database).is_none().then(|| ServiceError::NoDatabase { known: known() })
    }

    /// What of the terms the operator does not allow.
    fn bounds(&self, terms: &SourceTerms, now: Timestamp) -> Result<(), ServiceError> {
        let (least, most) = (self.config.least_every_seconds, self.config.longest_timeout_seconds);
        if terms.timeout_seconds > most {
            return Err(ServiceError::SourceBounds {
                field: "timeout_seconds",
                detail: format!(
                    "whoever runs this service lets a query take at most {most} s (sources.longest_timeout_seconds)"
                ),
            });
        }
        let step = schedule::after(terms.starts_at.unwrap_or(now), terms.every, 1)
            .map(|next| next.duration_since(terms.starts_at.unwrap_or(now)).as_secs());
        match step {
            Some(seconds) if seconds >= i64::try_from(least).unwrap_or(i64::MAX) => Ok(()),
            Some(_) => Err(ServiceError::SourceBounds {
                field: "every",
                detail: format!(
                    "whoever runs this service has sources run at most every {least} s (sources.least_every_seconds)"
                ),
            }),
            None => {
                Err(ServiceError::SourceBounds { field: "every", detail: "it leads beyond the calendar".to_owned() })
            }
        }
    }
}

impl Service {
    /// Keeps a network's source in place of the one it has; true when it had none. `allows` is asked about the validator of what
    /// stands there.
    ///
    /// # Errors
    /// When its database is not listed, its terms are beyond the operator's bounds, there is no such network, `allows` refuses, or
    /// the database fails.
    pub async fn put_source(
        &self,
        network: NetworkName,
        terms: &SourceTerms,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(SourceStanding, bool), ServiceError> {
        self.check_tables().await?;
        // First: whether there is such a network is not for this to hide.
        self.network(&network).await?;
        if let Some(refusal) = self.sources.refusal(&terms.database) {
            return Err(refusal);
        }
        let now = kept_now();
        self.sources.bounds(terms, now)?;
        let source = to_store(terms, now)?;
        let due_at = match terms.starts_at {
            None => now,
            Some(start) => schedule::next(start, terms.every, now),
        };
        let service = self.clone();
        in_own_task(async move {
            let made = service.store.put_source(network.as_str(), &source, due_at, allows).await;
            let made = made.map_err(|error| ServiceError::from_write(error, Thing::Source))?;
            service.sources.wake.notify_one();
            Ok((service.source(&network).await?, made))
        })
        .await
    }

    /// A network's source and how its runs fare.
    ///
    /// # Errors
    /// When there is no such network, it has no source, or the database fails.
    pub async fn source(&self, network: &NetworkName) -> Result<SourceStanding, ServiceError> {
        match self.store.find_source(network.as_str()).await? {
            Some(found) => Ok(self.sources.standing(found)),
            None => self.network(network).await.and(Err(ServiceError::NotFound(Thing::Source))),
        }
    }

    /// Deletes a network's source; its snapshots stay. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network, it has no source, `allows` refuses, or the database fails.
    pub async fn delete_source(
        &self,
        network: NetworkName,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let store = self.store.clone();
        in_own_task(async move {
            let done = store.delete_source(network.as_str(), allows).await;
            done.map_err(|error| ServiceError::from_write(error, Thing::Source))
        })
        .await
    }

    /// Runs a network's source now, and waits up to `patience` for what comes of it. A run that is at work is the one.
    ///
    /// # Errors
    /// When there is no such network, it has no source, its database is not listed any more, the run failed, or the database fails.
    pub async fn run_source(&self, network: NetworkName, patience: Duration) -> Result<AskedRun, ServiceError> {
        let asked = Instant::now();
        let before = self.source(&network).await?;
        if let Some(refusal) = self.sources.refusal(&before.answer.database) {
            return Err(refusal);
        }
        let service = self.clone();
        let name = network.clone();
        in_own_task(async move {
            let due = service.store.source_due_now(name.as_str()).await;
            due.map_err(|error| ServiceError::from_write(error, Thing::Source))
        })
        .await?;
        self.sources.wake.notify_one();
        loop {
            let now = self.source(&network).await?;
            if now.tag == before.tag && now.ended > before.ended {
                return match now.answer.last_failure {
                    Some(failure) if now.answer.failures > 0 => Err(ServiceError::SourceFailed(failure.reason)),
                    _ => Ok(AskedRun::Succeeded(now)),
                };
            }
            let left = patience.saturating_sub(asked.elapsed());
            if left.is_zero() {
                return Ok(AskedRun::Goes(now));
            }
            sleep(LOOK_PAUSE.min(left)).await;
        }
    }
}

fn to_store(terms: &SourceTerms, now: Timestamp) -> Result<NewSource, ServiceError> {
    #[derive(Serialize)]
    struct Tagged<'a> {
        database: &'a str,
        query: &'a str,
        every: &'a str,
        starts_at: Option<String>,
        timeout_seconds: u64,
    }
    let every = terms.every.to_string();
    let tagged = Tagged {
        database: &terms.database,
        query: &terms.query,
        every: &every,
        starts_at: terms.starts_at.map(|time| time.to_string()),
        timeout_seconds: terms.timeout_seconds,
    };
    let text = serde_json::to_vec(&tagged).map_err(|error| ServiceError::Broken(error.to_string()))?;
    Ok(NewSource {
        tag: sha256_hex(&text),
        database: terms.database.clone(),
        query: terms.query.clone(),
        timeout_seconds: terms.timeout_seconds,
        starts_at: terms.starts_at.unwrap_or(now),
        updated_at: now,
        every,
    })
}

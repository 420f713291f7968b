//! Refreshes: every change of a network's evidence or plan is noted in its own transaction, with the job that follows it.

use jiff::Timestamp;

use uuid::Uuid;

use super::accounts::{self, NewAccount};
use super::columns::{corrupt, signed, unsigned, uuid};
use super::ids::next_id;
use super::jobs::{JobKind, JobState, end, insert};
use super::latest;
use super::runs::{NewRun, insert_run};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Scope, Touched};
use super::{Signal, Store, StoreError, backtests, outbox};

/// Ended refreshes whose records are kept of one network: a network that is fed for years does not fill the list of jobs.
const KEPT_REFRESHES: i64 = 100;

/// How a network's latest forecast stands to what is stored.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RefreshState {
    /// It is being made anew.
    Refreshing,
    /// It stands on all that is stored.
    Current,
    /// No newer one could be made.
    Outdated,
}

impl RefreshState {
    const ALL: [Self; 3] = [Self::Refreshing, Self::Current, Self::Outdated];

    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Refreshing => "refreshing",
            Self::Current => "current",
            Self::Outdated => "outdated",
        }
    }

    pub(super) fn named(name: &str) -> Result<Self, StoreError> {
        Self::ALL.into_iter().find(|state| state.as_str() == name).ok_or_else(|| corrupt("refresh_state", name))
    }
}

/// What the newest change of a network has led to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RefreshStatus {
    /// How the latest forecast stands.
    pub state: RefreshState,
    /// The refresh that says so.
    pub job: Uuid,
    /// Why there is no newer forecast, in words.
    pub reason: Option<String>,
}

/// What came of a change to what is stored.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Change {
    /// Whether nothing stood there before.
    pub made: bool,
    /// When what stands there was stored, if it was there already and nothing was changed.
    pub stands_since: Option<Timestamp>,
    /// The refresh that stands for it, to be started.
    pub refresh: Option<Uuid>,
}

/// The end of a refresh.
#[derive(Debug)]
pub struct RefreshEnd<'a> {
    /// The job.
    pub job: Uuid,
    /// Its network.
    pub network: &'a str,
    /// Revision that it stands on.
    pub revision: u64,
    /// The forecast with the last of its dates; none when there can be none.
    pub forecast: Option<(&'a NewRun, Timestamp)>,
    /// Why there is none, in words.
    pub reason: Option<&'a str>,
    /// Accounts of earlier forecasts.
    pub accounts: &'a [NewAccount],
    /// Accounts against counts that are stored no more.
    pub withdrawn: &'a [(Uuid, Timestamp)],
    /// How things stand that notices tell of.
    pub signals: &'a [Signal],
    /// How the job ends, and its outcome.
    pub end: (JobState, &'a str),
}

/// What came of ending a refresh.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RefreshEnded {
    /// All of it is stored; with the backtest that was taken on anew.
    Stored(Option<Uuid>),
    /// The job was called off before.
    CalledOff,
    /// What is stored of the network changed meanwhile; another refresh waits.
    Superseded,
    /// An earlier refresh did the same.
    Done,
}

impl Store {
    /// Stores what a refresh came to and ends its job, in one transaction; nothing at all but for [`RefreshEnded::Stored`]. A backtest
    /// whose counts were replaced is taken on anew.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn finish_refresh(&self, ended: &RefreshEnd<'_>) -> Result<RefreshEnded, StoreError> {
        let mut transaction = self.begin(Scope::Network(ended.network)).await?;
        // A latest forecast that was deleted is made again.
        let stands: Option<(i64, Option<i64>)> = query(
            "SELECT revision, CASE WHEN EXISTS (SELECT 1 FROM latest_forecasts WHERE network = name) THEN refreshed END \
             FROM networks WHERE name = $1",
        )
        .bind(ended.network)
        .fetch_optional(&mut transaction)
        .await?;
        let Some((revision, refreshed)) = stands else { return Ok(RefreshEnded::CalledOff) };
        if unsigned("revision", revision)? != ended.revision {
            return Ok(RefreshEnded::Superseded);
        }
        if refreshed == Some(revision) {
            return Ok(RefreshEnded::Done);
        }
        let (state, outcome) = ended.end;
        // First: a job that was called off, by itself or with its network, must not touch anything.
        if !end(&mut transaction, ended.job, state, Some(outcome)).await? {
            return Ok(RefreshEnded::CalledOff);
        }
        for (run, as_of) in ended.withdrawn {
            accounts::withdraw(&mut transaction, *run, *as_of).await?;
        }
        for account in ended.accounts {
            accounts::insert(&mut transaction, ended.network, account).await?;
        }
        match ended.forecast {
            Some((run, issued_to)) => {
                insert_run(&mut transaction, run, Some(issued_to)).await?;
                latest::replace(&mut transaction, ended.network, run, ended.job).await?;
                query("UPDATE networks SET refreshed = $2 WHERE name = $1")
                    .bind(ended.network)
                    .bind(revision)
                    .execute(&mut transaction)
                    .await?;
                note(&mut transaction, ended.network, RefreshState::Current, ended.job, None).await?;
            }
            None => note(&mut transaction, ended.network, RefreshState::Outdated, ended.job, ended.reason).await?,
        }
        outbox::note(&mut transaction, ended.network, ended.job, ended.signals, ended.forecast.is_some()).await?;
        let redo = backtests::redo(&mut transaction, ended.network).await?;
        prune(&mut transaction, ended.network).await?;
        self.commit_of(transaction, Touched::Network(ended.network)).await?;
        Ok(RefreshEnded::Stored(redo))
    }

    /// Ends a refresh of this process that has nothing to store, unless it was called off or claimed by another before. `stands` is
    /// how the latest forecast stands then, and why; it is noted where no newer refresh has a say, and a backtest whose counts were
    /// replaced is taken on anew and returned.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn end_refresh(
        &self,
        job: Uuid,
        network: &str,
        (state, outcome): (JobState, &str),
        stands: Option<(RefreshState, Option<&str>)>,
    ) -> Result<Option<Uuid>, StoreError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        if !self.holds(&mut transaction, job).await? || !end(&mut transaction, job, state, Some(outcome)).await? {
            return Ok(None);
        }
        let mut redo = None;
        if let Some((state, reason)) = stands {
            note_of(&mut transaction, network, job, (state, reason)).await?;
            redo = backtests::redo(&mut transaction, network).await?;
        }
        prune(&mut transaction, network).await?;
        self.commit_of(transaction, Touched::Network(network)).await?;
        Ok(redo)
    }
}

/// Notes that a network's evidence or plan changes: its next revision, and the refresh to be started, if one is taken on.
pub(super) async fn changed(connection: &mut Connection, network: &str) -> Result<(u64, Option<Uuid>), StoreError> {
    let revision: i64 = query_scalar("UPDATE networks SET revision = revision + 1 WHERE name = $1 RETURNING revision")
        .bind(network)
        .fetch_one(&mut *connection)
        .await?;
    Ok((unsigned("revision", revision)?, enqueue(connection, network).await?))
}

/// Takes on a refresh of a network that has a plan, or forecasts to account for; the one that waits already stands for it.
pub(super) async fn enqueue(connection: &mut Connection, network: &str) -> Result<Option<Uuid>, StoreError> {
    let tracked: bool = query_scalar(
        "SELECT EXISTS (SELECT 1 FROM networks WHERE name = $1 AND forecast_plan IS NOT NULL) \
         OR EXISTS (SELECT 1 FROM network_runs WHERE network = $1 AND issued_to IS NOT NULL)",
    )
    .bind(network)
    .fetch_one(&mut *connection)
    .await?;
    if !tracked {
        return Ok(None);
    }
    let waiting: Option<String> =
        query_scalar("SELECT id FROM jobs WHERE network = $1 AND kind = 'refresh' AND state = 'waiting'")
            .bind(network)
            .fetch_optional(&mut *connection)
            .await?;
    let job = match waiting {
        Some(id) => uuid(&id)?,
        None => {
            let id = next_id();
            insert(connection, id, JobKind::Refresh, network, "{}").await?;
            id
        }
    };
    note(connection, network, RefreshState::Refreshing, job, None).await?;
    Ok(Some(job))
}

/// Marks the runs and backtests of a network that stand on counts of `revision`, which are replaced now.
pub(super) async fn corrected(connection: &mut Connection, network: &str, revision: u64) -> Result<(), StoreError> {
    query("UPDATE network_runs SET evidence_corrected_at = $3 WHERE network = $1 AND revision >= $2")
        .bind(network)
        .bind(signed("revision", revision)?)
        .bind(Timestamp::now().as_microsecond())
        .execute(&mut *connection)
        .await?;
    backtests::corrected(connection, network, revision).await
}

/// Notes how the latest forecast stands and why, where `job` is the newest refresh.
pub(super) async fn note_of(
    connection: &mut Connection,
    network: &str,
    job: Uuid,
    (state, reason): (RefreshState, Option<&str>),
) -> Result<(), StoreError> {
    let newest: Option<i32> = query_scalar("SELECT 1 FROM networks WHERE name = $1 AND refresh_job = $2")
        .bind(network)
        .bind(job.to_string())
        .fetch_optional(&mut *connection)
        .await?;
    if newest.is_some() {
        note(connection, network, state, job, reason).await?;
    }
    Ok(())
}

async fn note(
    connection: &mut Connection,
    network: &str,
    state: RefreshState,
    job: Uuid,
    reason: Option<&str>,
) -> Result<(), StoreError> {
    query("UPDATE networks SET refresh_state = $2, refresh_job = $3, refresh_reason = $4 WHERE name = $1")
        .bind(network)
        .bind(state.as_str())
        .bind(job.to_string())
        .bind(reason)
        .execute(&mut *connection)
        .await?;
    latest::note(connection, network, state, job).await
}

async fn prune(connection: &mut Connection, network: &str) -> Result<(), StoreError> {
    query(
        "DELETE FROM jobs WHERE network = $1 AND kind = 'refresh' AND state NOT IN ('waiting', 'running') AND id NOT IN \
         (SELECT id FROM jobs WHERE network = $1 AND kind = 'refresh' ORDER BY id DESC LIMIT $2)",
    )
    .bind(network)
    .bind(KEPT_REFRESHES)
    .execute(connection)
    .await?;
    Ok(())
}

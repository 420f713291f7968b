//! Jobs: work that outlasts its request and the process.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{corrupt, time, unsigned, uuid};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Clash, Scope, Touched, WriteError, network_exists};
use super::{RefreshState, Store, StoreError, audit, backtests, refreshes};

/// How long a claim on a job holds unless it is prolonged, microseconds: several times what passes between two prolongations.
const CLAIM_MICROS: i64 = 20_000_000;

/// Why a network has no newer forecast when its refresh was called off.
const CALLED_OFF: &str =
    "the refresh was called off; the next change, or storing the network's settings again, makes another";

/// How a job stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum JobState {
    /// For a free worker.
    Waiting,
    /// At work, or to be taken up again by the next process.
    Running,
    /// Its result is stored.
    Succeeded,
    /// It came to no result.
    Failed,
    /// It was called off, and changed nothing.
    Cancelled,
}

impl JobState {
    const ALL: [Self; 5] = [Self::Waiting, Self::Running, Self::Succeeded, Self::Failed, Self::Cancelled];

    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Waiting => "waiting",
            Self::Running => "running",
            Self::Succeeded => "succeeded",
            Self::Failed => "failed",
            Self::Cancelled => "cancelled",
        }
    }

    /// Whether there is something left to do.
    pub fn is_live(self) -> bool {
        matches!(self, Self::Waiting | Self::Running)
    }
}

/// What a job does.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum JobKind {
    /// Counts a link list.
    LinkList,
    /// Makes a network's latest forecast anew, and accounts for earlier ones.
    Refresh,
    /// Forecasts from past snapshots and scores that by what came.
    Backtest,
}

impl JobKind {
    const ALL: [Self; 3] = [Self::LinkList, Self::Refresh, Self::Backtest];

    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::LinkList => "link_list",
            Self::Refresh => "refresh",
            Self::Backtest => "backtest",
        }
    }

    fn named(name: &str) -> Result<Self, StoreError> {
        Self::ALL.into_iter().find(|kind| kind.as_str() == name).ok_or_else(|| corrupt("kind", name))
    }
}

/// A job as stored.
#[derive(Debug, Clone, PartialEq)]
pub struct StoredJob {
    /// Its id, ordered by time.
    pub id: Uuid,
    /// What it does.
    pub kind: JobKind,
    /// The network it is about.
    pub network: String,
    /// How it stands.
    pub state: JobState,
    /// How often it was begun.
    pub starts: u64,
    /// When it was asked for.
    pub created_at: Timestamp,
    /// When it was last begun.
    pub started_at: Option<Timestamp>,
    /// When it ended.
    pub ended_at: Option<Timestamp>,
    /// How far it had come when its process last said so, 0 to 1.
    pub progress: Option<f64>,
    /// What is to be done, JSON.
    pub task: String,
    /// What came of it, or why nothing did, JSON.
    pub outcome: Option<String>,
}

/// Which jobs to list; newest first.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct JobFilter {
    /// Only of this network.
    pub network: Option<String>,
    /// Only what belongs to a network that the key with this id is bound to.
    pub seen_by: Option<String>,
    /// Only older than this one.
    pub before: Option<Uuid>,
    /// At most this many.
    pub limit: u32,
}

/// What came of calling a job off.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum CalledOff {
    /// It was live and is cancelled now.
    Cancelled,
    /// It had ended; its record is gone now.
    Removed,
    /// There was none.
    Missing,
}

/// What came of beginning a job.
#[derive(Debug, Clone, PartialEq)]
pub enum JobStart {
    /// It begins.
    Begun(StoredJob),
    /// Another process is at it.
    Elsewhere,
    /// It has ended, or is gone.
    Over,
}

#[derive(FromRow)]
struct JobRow {
    id: String,
    kind: String,
    network: String,
    state: String,
    starts: i64,
    created_at: i64,
    started_at: Option<i64>,
    ended_at: Option<i64>,
    progress: Option<f64>,
    task: String,
    outcome: Option<String>,
}

impl Store {
    /// Stores a waiting job of a network that has no other of its kind.
    ///
    /// # Errors
    /// When there is no such network, it has a live job of the kind, `most_live` jobs are live, refreshes not counted, or the
    /// database fails.
    pub async fn insert_job(
        &self,
        id: Uuid,
        (kind, network): (JobKind, &str),
        task: &str,
        most_live: u64,
    ) -> Result<(), WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        if let Some(job) = live_job(&mut transaction, network, kind).await? {
            return Err(Clash::JobLive { job }.into());
        }
        // Refreshes are the service's own: a network has at most one that waits.
        let live: i64 =
            query_scalar("SELECT count(*) FROM jobs WHERE state IN ('waiting', 'running') AND kind <> 'refresh'")
                .fetch_one(&mut transaction)
                .await?;
        if unsigned("live", live)? >= most_live {
            return Err(Clash::TooManyJobs.into());
        }
        insert(&mut transaction, id, kind, network, task).await?;
        audit::makes(id);
        Ok(self.commit(transaction).await?)
    }

    /// Checks that a network is tracked and has no live job of a kind.
    ///
    /// # Errors
    /// When it is not, or it has one, or the database fails.
    pub async fn check_idle(&self, network: &str, kind: JobKind) -> Result<(), WriteError> {
        let mut connection = self.reader().await?;
        network_exists(&mut connection, network).await?;
        match live_job(&mut connection, network, kind).await? {
            Some(job) => Err(Clash::JobLive { job }.into()),
            None => Ok(()),
        }
    }

    /// Claims a live job for this process and notes that it begins. While it is claimed no other process begins it; a claim that is
    /// not prolonged in time is anybody's.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn start_job(&self, id: Uuid) -> Result<JobStart, StoreError> {
        // After a change that is being written and counts on the job while it waits: what it changes is read then.
        let mut transaction = self.begin(Scope::OfJob(id)).await?;
        let now = transaction.now().await?;
        let skip = transaction.skip_locked();
        let claimed = query(
            "UPDATE jobs SET state = 'running', starts = starts + 1, started_at = $2, claimed_by = $3, claimed_until = $4, \
             progress = 0.0 WHERE id = (SELECT id FROM jobs WHERE id = $1 AND (state = 'waiting' OR state = 'running' AND \
             (claimed_by IS NULL OR claimed_by = $3 OR claimed_until < $2))",
        )
        .bind(id.to_string())
        .bind(now)
        .bind(self.process.to_string())
        .bind(now.saturating_add(CLAIM_MICROS))
        .push(skip)
        .push(")")
        .execute(&mut transaction)
        .await?;
        let job = find(&mut transaction, id).await?;
        self.commit_of(transaction, Touched::Nothing).await?;
        Ok(match job {
            Some(job) if claimed > 0 => JobStart::Begun(job),
            Some(job) if job.state.is_live() => JobStart::Elsewhere,
            _ => JobStart::Over,
        })
    }

    /// Prolongs this process's claim on a job and notes how far it has come, 0 to 1; false when it is no longer its own, for it was
    /// called off or claimed by another.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn prolong_claim(&self, id: Uuid, progress: f64) -> Result<bool, StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        let now = transaction.now().await?;
        let kept = query(
            "UPDATE jobs SET claimed_until = $3, progress = $4 WHERE id = $1 AND claimed_by = $2 AND state = 'running'",
        )
        .bind(id.to_string())
        .bind(self.process.to_string())
        .bind(now.saturating_add(CLAIM_MICROS))
        .bind(progress)
        .execute(&mut transaction)
        .await?;
        self.commit_of(transaction, Touched::Nothing).await?;
        Ok(kept > 0)
    }

    /// Gives up claims: those of this process, whose jobs have not been begun in vain, or, of a file, those that the process before
    /// has left.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn release_claims(&self) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::Own).await?;
        query(
            "UPDATE jobs SET starts = CASE WHEN claimed_by = $1 THEN starts - 1 ELSE starts END, claimed_by = NULL, \
             claimed_until = NULL WHERE state = 'running' AND (claimed_by = $1 OR $2)",
        )
        .bind(self.process.to_string())
        .bind(!self.is_shared())
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await
    }

    /// Notes that a job of this process failed; false when it is no longer its own: called off before, or claimed by another.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn fail_job(&self, id: Uuid, outcome: &str) -> Result<bool, StoreError> {
        let mut transaction = self.begin(Scope::OfJob(id)).await?;
        if !self.holds(&mut transaction, id).await? {
            return Ok(false);
        }
        let ended = end(&mut transaction, id, JobState::Failed, Some(outcome)).await?;
        self.commit(transaction).await?;
        Ok(ended)
    }

    /// Whether a job is this process's own: whoever has lost it has no say in how it ended.
    pub(super) async fn holds(&self, connection: &mut Connection, id: Uuid) -> Result<bool, StoreError> {
        let held =
            query_scalar("SELECT EXISTS (SELECT 1 FROM jobs WHERE id = $1 AND state = 'running' AND claimed_by = $2)");
        Ok(held.bind(id.to_string()).bind(self.process.to_string()).fetch_one(connection).await?)
    }

    /// Calls a live job off, or removes the record of one that has ended.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn call_off(&self, id: Uuid) -> Result<CalledOff, StoreError> {
        let mut transaction = self.begin(Scope::OfJob(id)).await?;
        let job = find(&mut transaction, id).await?;
        let done = if end(&mut transaction, id, JobState::Cancelled, None).await? {
            if let Some(job) = job.filter(|job| job.kind == JobKind::Refresh) {
                let stands = (RefreshState::Outdated, Some(CALLED_OFF));
                refreshes::note_of(&mut transaction, &job.network, id, stands).await?;
            }
            CalledOff::Cancelled
        } else {
            let removed = query("DELETE FROM jobs WHERE id = $1").bind(id.to_string());
            match removed.execute(&mut transaction).await? {
                // Nothing is written, so nothing is told of it.
                0 => return Ok(CalledOff::Missing),
                _ => CalledOff::Removed,
            }
        };
        self.commit(transaction).await?;
        Ok(done)
    }

    /// The job with this id, if there is one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_job(&self, id: Uuid) -> Result<Option<StoredJob>, StoreError> {
        let mut connection = self.reader().await?;
        find(&mut connection, id).await
    }

    /// Jobs that pass the filter, newest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_jobs(&self, filter: &JobFilter) -> Result<Vec<StoredJob>, StoreError> {
        let rows: Vec<JobRow> = query(
            "SELECT id, kind, network, state, starts, created_at, started_at, ended_at, progress, task, outcome FROM jobs \
             WHERE true",
        )
        .bind_where("network = ?", filter.network.as_deref())
        .bind_where(
            "network IN (SELECT bound.network FROM access_key_networks AS bound WHERE bound.access_key = ?)",
            filter.seen_by.as_deref(),
        )
        .bind_where("id < ?", filter.before.map(|id| id.to_string()))
        .order_by_limit("id DESC", filter.limit)
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(StoredJob::try_from).collect()
    }

    /// The oldest jobs that this process may begin, at most `limit`.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn claimable_jobs(&self, limit: u32) -> Result<Vec<(Uuid, JobKind)>, StoreError> {
        let mut connection = self.reader().await?;
        let now = connection.now().await?;
        let jobs: Vec<(String, String)> = query(
            "SELECT id, kind FROM jobs WHERE state = 'waiting' OR state = 'running' AND (claimed_by IS NULL OR claimed_by = $1 \
             OR claimed_until < $2) ORDER BY id LIMIT $3",
        )
        .bind(self.process.to_string())
        .bind(now)
        .bind(i64::from(limit))
        .fetch_all(&mut connection)
        .await?;
        jobs.iter().map(|(id, kind)| Ok((uuid(id)?, JobKind::named(kind)?))).collect()
    }
}

/// Ends a live job, and drops what it had so far; false when it has ended.
pub(super) async fn end(
    connection: &mut Connection,
    id: Uuid,
    state: JobState,
    outcome: Option<&str>,
) -> Result<bool, StoreError> {
    let done = query(
        "UPDATE jobs SET state = $2, outcome = $3, ended_at = $4 WHERE id = $1 AND state IN ('waiting', 'running')",
    )
    .bind(id.to_string())
    .bind(state.as_str())
    .bind(outcome)
    .bind(Timestamp::now().as_microsecond())
    .execute(&mut *connection)
    .await?;
    backtests::drop_records(connection, id).await?;
    Ok(done > 0)
}

/// Stores a waiting job.
pub(super) async fn insert(
    connection: &mut Connection,
    id: Uuid,
    kind: JobKind,
    network: &str,
    task: &str,
) -> Result<(), StoreError> {
    query(
        "INSERT INTO jobs (id, kind, network, state, starts, created_at, task) VALUES ($1, $2, $3, 'waiting', 0, $4, $5)",
    )
    .bind(id.to_string())
    .bind(kind.as_str())
    .bind(network)
    .bind(Timestamp::now().as_microsecond())
    .bind(task)
    .execute(connection)
    .await?;
    Ok(())
}

/// Calls every live job of a network off.
pub(super) async fn call_off_of(connection: &mut Connection, network: &str) -> Result<Vec<Uuid>, StoreError> {
    let ids: Vec<String> = query_scalar("SELECT id FROM jobs WHERE network = $1 AND state IN ('waiting', 'running')")
        .bind(network)
        .fetch_all(&mut *connection)
        .await?;
    let jobs = ids.iter().map(|id| uuid(id)).collect::<Result<Vec<_>, _>>()?;
    for &job in &jobs {
        end(connection, job, JobState::Cancelled, None).await?;
    }
    Ok(jobs)
}

pub(super) async fn live_job(
    connection: &mut Connection,
    network: &str,
    kind: JobKind,
) -> Result<Option<Uuid>, StoreError> {
    let id: Option<String> =
        query_scalar("SELECT id FROM jobs WHERE network = $1 AND kind = $2 AND state IN ('waiting', 'running')")
            .bind(network)
            .bind(kind.as_str())
            .fetch_optional(connection)
            .await?;
    id.as_deref().map(uuid).transpose()
}

async fn find(connection: &mut Connection, id: Uuid) -> Result<Option<StoredJob>, StoreError> {
    let row: Option<JobRow> = query(
        "SELECT id, kind, network, state, starts, created_at, started_at, ended_at, progress, task, outcome FROM jobs WHERE id = $1",
    )
    .bind(id.to_string())
    .fetch_optional(connection)
    .await?;
    row.map(StoredJob::try_from).transpose()
}

impl TryFrom<JobRow> for StoredJob {
    type Error = StoreError;

    fn try_from(row: JobRow) -> Result<Self, StoreError> {
        let state = JobState::ALL.into_iter().find(|state| state.as_str() == row.state);
        Ok(Self {
            id: uuid(&row.id)?,
            kind: JobKind::named(&row.kind)?,
            state: state.ok_or_else(|| corrupt("state", &row.state))?,
            network: row.network,
            starts: unsigned("starts", row.starts)?,
            created_at: time(row.created_at)?,
            started_at: row.started_at.map(time).transpose()?,
            progress: row.progress,
            ended_at: row.ended_at.map(time).transpose()?,
            task: row.task,
            outcome: row.outcome,
        })
    }
}

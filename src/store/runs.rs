//! Runs, and the idempotency keys that lead to them.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date_key, signed, time, unsigned, uuid};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Scope, Touched};
use super::{Store, StoreError, audit};

/// What a run answered.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RunKind {
    /// A forecast.
    Forecast,
    /// A fit alone.
    Fit,
}

impl RunKind {
    fn as_str(self) -> &'static str {
        match self {
            Self::Forecast => "forecast",
            Self::Fit => "fit",
        }
    }
}

/// A run to keep.
#[derive(Debug, Clone)]
pub struct NewRun {
    /// Its id, ordered by time.
    pub id: Uuid,
    /// What it answered.
    pub kind: RunKind,
    /// The network it belongs to.
    pub network: Option<String>,
    /// The caller's label.
    pub label: Option<String>,
    /// When it was answered.
    pub created_at: Timestamp,
    /// Engine and version.
    pub engine: &'static str,
    /// Seed, at most 2^53 − 1.
    pub seed: u64,
    /// Digest of the inputs.
    pub inputs_digest: String,
    /// Strong validator of the document.
    pub tag: String,
    /// The answer, byte for byte.
    pub document: String,
    /// The inputs in canonical form.
    pub inputs: String,
    /// What it stands on, when that is stored of a network.
    pub stored: Option<StoredOrigin>,
}

/// What a run of a tracked network stands on.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct StoredOrigin {
    /// Revision of the network.
    pub revision: u64,
    /// Date of the newest counts.
    pub as_of: Timestamp,
}

/// A caller's claim that requests with this key are one and the same.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct KeyClaim {
    /// The key.
    pub key: String,
    /// Digest of the request body, hexadecimal.
    pub body_digest: String,
}

/// A run as kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredRun {
    /// Its id.
    pub id: Uuid,
    /// When it was answered.
    pub created_at: Timestamp,
    /// Strong validator of the document.
    pub tag: String,
    /// The answer, byte for byte.
    pub document: String,
}

/// A run's line in a list.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RunSummary {
    /// Its id.
    pub id: Uuid,
    /// The network it belongs to.
    pub network: Option<String>,
    /// The caller's label.
    pub label: Option<String>,
    /// When it was answered.
    pub created_at: Timestamp,
    /// Engine and version.
    pub engine: String,
    /// Seed.
    pub seed: u64,
    /// Digest of the inputs.
    pub inputs_digest: String,
    /// Whether a refresh issued it.
    pub issued: bool,
    /// When counts it stands on were last replaced.
    pub evidence_corrected_at: Option<Timestamp>,
}

/// Which runs to list; newest first.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct RunFilter {
    /// Only this label.
    pub label: Option<String>,
    /// Only this network.
    pub network: Option<String>,
    /// Only what belongs to a network that the key with this id is bound to.
    pub seen_by: Option<String>,
    /// Only runs older than this one.
    pub before: Option<Uuid>,
    /// At most this many.
    pub limit: u32,
}

/// What came of keeping a run.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Inserted {
    /// It is kept.
    Kept,
    /// The key already led to this run, for the same body.
    Replayed(StoredRun),
    /// The key already led to a run for another body.
    KeyTaken,
}

#[derive(FromRow)]
struct RunRow {
    id: String,
    created_at: i64,
    tag: String,
    document: String,
}

#[derive(FromRow)]
struct KeyedRunRow {
    body_digest: String,
    #[sqlx(flatten)]
    run: RunRow,
}

#[derive(FromRow)]
struct SummaryRow {
    id: String,
    network: Option<String>,
    label: Option<String>,
    created_at: i64,
    engine: String,
    seed: i64,
    inputs_digest: String,
    issued: bool,
    evidence_corrected_at: Option<i64>,
}

impl Store {
    /// Keeps a run, and its key with it, or finds what the key already led to.
    ///
    /// # Errors
    /// When the database fails; then nothing was kept. When its file is gone; then nothing is where anybody finds it.
    pub async fn insert_run(&self, run: &NewRun, claim: Option<&KeyClaim>) -> Result<Inserted, StoreError> {
        let scope = claim.map_or(Scope::Own, |claim| Scope::Key(&claim.key));
        let mut transaction = self.begin(scope).await?;
        if let Some(claim) = claim
            && let Some(earlier) = claimed(&mut transaction, run.kind, claim).await?
        {
            return Ok(earlier);
        }
        insert_run(&mut transaction, run, None).await?;
        audit::makes(run.id);
        if let Some(claim) = claim {
            query("INSERT INTO idempotency_keys (kind, key, body_digest, run_id) VALUES ($1, $2, $3, $4)")
                .bind(run.kind.as_str())
                .bind(claim.key.as_str())
                .bind(claim.body_digest.as_str())
                .bind(run.id.to_string())
                .execute(&mut transaction)
                .await?;
        }
        self.commit_of(transaction, Touched::Nothing).await?;
        Ok(Inserted::Kept)
    }

    /// What a key already led to, if anything.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_claim(&self, kind: RunKind, claim: &KeyClaim) -> Result<Option<Inserted>, StoreError> {
        let mut connection = self.reader().await?;
        claimed(&mut connection, kind, claim).await
    }

    /// The run with this id, if it is kept.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_run(&self, kind: RunKind, id: Uuid) -> Result<Option<StoredRun>, StoreError> {
        let row: Option<RunRow> = query("SELECT id, created_at, tag, document FROM runs WHERE id = $1 AND kind = $2")
            .bind(id.to_string())
            .bind(kind.as_str())
            .fetch_optional(&mut self.reader().await?)
            .await?;
        row.map(StoredRun::try_from).transpose()
    }

    /// The validator of the run with this id, if it is kept.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_tag(&self, kind: RunKind, id: Uuid) -> Result<Option<String>, StoreError> {
        let tag = query_scalar("SELECT tag FROM runs WHERE id = $1 AND kind = $2")
            .bind(id.to_string())
            .bind(kind.as_str())
            .fetch_optional(&mut self.reader().await?)
            .await?;
        Ok(tag)
    }

    /// Runs that pass the filter, newest first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_runs(&self, kind: RunKind, filter: &RunFilter) -> Result<Vec<RunSummary>, StoreError> {
        let rows: Vec<SummaryRow> = query(
            "SELECT id, runs.network, label, created_at, engine, seed, inputs_digest, issued_to IS NOT NULL AS issued, \
             evidence_corrected_at FROM runs LEFT JOIN network_runs ON run_id = id WHERE kind = $1",
        )
        .bind(kind.as_str())
        .bind_where("label = ?", filter.label.as_deref())
        .bind_where("runs.network = ?", filter.network.as_deref())
        .bind_where(
            "runs.network IN (SELECT bound.network FROM access_key_networks AS bound WHERE bound.access_key = ?)",
            filter.seen_by.as_deref(),
        )
        .bind_where("id < ?", filter.before.map(|id| id.to_string()))
        .order_by_limit("id DESC", filter.limit)
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(RunSummary::try_from).collect()
    }

    /// Deletes a run and its keys; false when it was not kept.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn delete_run(&self, kind: RunKind, id: Uuid) -> Result<bool, StoreError> {
        let mut transaction = self.begin(Scope::OfRun(id)).await?;
        let done = query("DELETE FROM runs WHERE id = $1 AND kind = $2")
            .bind(id.to_string())
            .bind(kind.as_str())
            .execute(&mut transaction)
            .await?;
        self.commit(transaction).await?;
        Ok(done > 0)
    }
}

/// Stores a run and what it stands on; `issued_to` is the last date of a forecast that a refresh issues.
pub(super) async fn insert_run(
    connection: &mut Connection,
    run: &NewRun,
    issued_to: Option<Timestamp>,
) -> Result<(), StoreError> {
    query(
        "INSERT INTO runs (id, kind, network, label, created_at, engine, seed, inputs_digest, tag, document, inputs) \
         VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11)",
    )
    .bind(run.id.to_string())
    .bind(run.kind.as_str())
    .bind(run.network.as_deref())
    .bind(run.label.as_deref())
    .bind(run.created_at.as_microsecond())
    .bind(run.engine)
    .bind(signed("seed", run.seed)?)
    .bind(run.inputs_digest.as_str())
    .bind(run.tag.as_str())
    .bind(run.document.as_str())
    .bind(run.inputs.as_str())
    .execute(&mut *connection)
    .await?;
    let Some(stored) = run.stored else { return Ok(()) };
    // The network may have gone since the evidence was read.
    query(
        "INSERT INTO network_runs (run_id, network, revision, origin, issued_to) \
         VALUES ($1, (SELECT name FROM networks WHERE name = $2), $3, $4, $5)",
    )
    .bind(run.id.to_string())
    .bind(run.network.as_deref())
    .bind(signed("revision", stored.revision)?)
    .bind(date_key(stored.as_of))
    .bind(issued_to.map(date_key))
    .execute(connection)
    .await?;
    Ok(())
}

async fn claimed(connection: &mut Connection, kind: RunKind, claim: &KeyClaim) -> Result<Option<Inserted>, StoreError> {
    let row: Option<KeyedRunRow> = query(
        "SELECT k.body_digest, r.id, r.created_at, r.tag, r.document \
         FROM idempotency_keys k JOIN runs r ON r.id = k.run_id WHERE k.kind = $1 AND k.key = $2",
    )
    .bind(kind.as_str())
    .bind(claim.key.as_str())
    .fetch_optional(connection)
    .await?;
    match row {
        None => Ok(None),
        Some(row) if row.body_digest == claim.body_digest => Ok(Some(Inserted::Replayed(row.run.try_into()?))),
        Some(_) => Ok(Some(Inserted::KeyTaken)),
    }
}

impl TryFrom<RunRow> for StoredRun {
    type Error = StoreError;

    fn try_from(row: RunRow) -> Result<Self, StoreError> {
        let (id, created_at) = (uuid(&row.id)?, time(row.created_at)?);
        Ok(Self { id, created_at, tag: row.tag, document: row.document })
    }
}

impl TryFrom<SummaryRow> for RunSummary {
    type Error = StoreError;

    fn try_from(row: SummaryRow) -> Result<Self, StoreError> {
        Ok(Self {
            id: uuid(&row.id)?,
            network: row.network,
            label: row.label,
            created_at: time(row.created_at)?,
            engine: row.engine,
            seed: unsigned("seed", row.seed)?,
            inputs_digest: row.inputs_digest,
            issued: row.issued,
            evidence_corrected_at: row.evidence_corrected_at.map(time).transpose()?,
        })
    }
}

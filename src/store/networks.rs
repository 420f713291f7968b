//! Tracked networks: their settings, and everything that is known of one.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, kind, kind_name, time, unsigned, uuid};
use super::jobs::call_off_of;
use super::refreshes::{Change, RefreshState, RefreshStatus, changed, enqueue};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Clash, Scope, WriteError};
use super::{Store, StoreError, StoredQuestion, backtests, questions};
use crate::model::DegreeKind;

/// A network's settings, to be stored.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewNetwork {
    /// Its name.
    pub name: String,
    /// What its degrees count.
    pub degree_kind: DegreeKind,
    /// The caller's words.
    pub description: Option<String>,
    /// Entry degrees, JSON.
    pub entry_degrees: Option<String>,
    /// Plan of its forecasts, JSON.
    pub forecast_plan: Option<String>,
    /// Strong validator of the settings.
    pub tag: String,
}

/// A network's settings as stored.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredNetwork {
    /// The settings.
    pub settings: NewNetwork,
    /// When they were first stored.
    pub created_at: Timestamp,
    /// When they last changed.
    pub updated_at: Timestamp,
    /// How often its evidence or plan changed.
    pub revision: u64,
    /// What the newest change led to; none before anything followed from one.
    pub refresh: Option<RefreshStatus>,
}

/// A network's line in a list.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NetworkSummary {
    /// Its settings.
    pub network: StoredNetwork,
    /// Snapshots stored.
    pub snapshots: u64,
    /// Date of the newest one.
    pub newest: Option<Timestamp>,
    /// Tables of transitions stored.
    pub transitions: u64,
    /// Whether link events are stored.
    pub link_events: bool,
}

/// All that is known of a network, at one moment; lists oldest first, counts as JSON.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredEvidence {
    /// Its settings.
    pub network: StoredNetwork,
    /// Date and degree counts.
    pub snapshots: Vec<(Timestamp, String)>,
    /// Start, end and counts.
    pub transitions: Vec<(Timestamp, Timestamp, String)>,
    /// Attachment statistics.
    pub link_events: Option<String>,
    /// Limits and scenarios kept with it, in the order of their names.
    pub questions: Vec<StoredQuestion>,
    /// SHA-256 of all of it but the plan, the description and the questions.
    pub digest: String,
}

#[derive(FromRow)]
struct NetworkRow {
    name: String,
    degree_kind: String,
    description: Option<String>,
    tag: String,
    created_at: i64,
    updated_at: i64,
    entry_degrees: Option<String>,
    forecast_plan: Option<String>,
    revision: i64,
    refresh_state: Option<String>,
    refresh_job: Option<String>,
    refresh_reason: Option<String>,
}

#[derive(FromRow)]
struct SummaryRow {
    #[sqlx(flatten)]
    network: NetworkRow,
    snapshots: i64,
    newest: Option<String>,
    transitions: i64,
    link_events: i64,
}

impl Store {
    /// Stores a network's settings. Where they change what a forecast follows from, or no forecast follows yet, a refresh is
    /// taken on. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When `allows` refuses, the kind of degree would change under stored counts, or the database fails.
    pub async fn put_network(
        &self,
        network: &NewNetwork,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Change, WriteError> {
        let mut transaction = self.begin(Scope::Network(&network.name)).await?;
        let stored = find(&mut transaction, &network.name).await?;
        if !allows(stored.as_ref().map(|stored| stored.settings.tag.as_str())) {
            return Err(WriteError::Mismatch);
        }
        if let Some(stored) = &stored
            && stored.settings.degree_kind != network.degree_kind
            && has_evidence(&mut transaction, &network.name).await?
        {
            return Err(Clash::DegreeKind { stored: stored.settings.degree_kind }.into());
        }
        query(
            "INSERT INTO networks (name, degree_kind, description, tag, created_at, updated_at, entry_degrees, \
             forecast_plan) VALUES ($1, $2, $3, $4, $5, $5, $6, $7) ON CONFLICT (name) DO UPDATE SET \
             degree_kind = excluded.degree_kind, description = excluded.description, tag = excluded.tag, \
             updated_at = excluded.updated_at, entry_degrees = excluded.entry_degrees, \
             forecast_plan = excluded.forecast_plan",
        )
        .bind(network.name.as_str())
        .bind(kind_name(network.degree_kind))
        .bind(network.description.as_deref())
        .bind(network.tag.as_str())
        .bind(Timestamp::now().as_microsecond())
        .bind(network.entry_degrees.as_deref())
        .bind(network.forecast_plan.as_deref())
        .execute(&mut transaction)
        .await?;
        let refresh = follow(&mut transaction, network, stored.as_ref()).await?;
        self.commit(transaction).await?;
        Ok(Change { made: stored.is_none(), stands_since: None, refresh })
    }

    /// The settings of a network, if it is tracked.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_network(&self, name: &str) -> Result<Option<StoredNetwork>, StoreError> {
        let mut connection = self.reader().await?;
        find(&mut connection, name).await
    }

    /// Networks whose name comes after `after`, in the order of their names; only those that the key `seen_by` is bound to.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_networks(
        &self,
        after: Option<&str>,
        limit: u32,
        seen_by: Option<&str>,
    ) -> Result<Vec<NetworkSummary>, StoreError> {
        let rows: Vec<SummaryRow> = query(
            "SELECT name, degree_kind, description, tag, created_at, updated_at, entry_degrees, forecast_plan, revision, \
             refresh_state, refresh_job, refresh_reason, (SELECT count(*) FROM snapshots WHERE network = name) AS snapshots, \
             (SELECT max(as_of) FROM snapshots WHERE network = name) AS newest, \
             (SELECT count(*) FROM transitions WHERE network = name) AS transitions, \
             (SELECT count(*) FROM link_events WHERE network = name) AS link_events \
             FROM networks WHERE name > $1 \
             AND ($3 = '' OR name IN (SELECT bound.network FROM access_key_networks AS bound WHERE bound.access_key = $3)) \
             ORDER BY name LIMIT $2",
        )
        .bind(after.unwrap_or_default())
        .bind(i64::from(limit))
        .bind(seen_by.unwrap_or_default())
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(NetworkSummary::try_from).collect()
    }

    /// Deletes a network and all that is stored of it, and calls its live jobs off, whose ids it returns; its runs stay.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, or the database fails.
    pub async fn delete_network(
        &self,
        name: &str,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Vec<Uuid>, WriteError> {
        let mut transaction = self.begin(Scope::Network(name)).await?;
        let stored = find(&mut transaction, name).await?.ok_or(WriteError::NoNetwork)?;
        if !allows(Some(&stored.settings.tag)) {
            return Err(WriteError::Mismatch);
        }
        let jobs = call_off_of(&mut transaction, name).await?;
        query("DELETE FROM networks WHERE name = $1").bind(name).execute(&mut transaction).await?;
        self.commit(transaction).await?;
        Ok(jobs)
    }

    /// All that is known of a network, if it is tracked.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_evidence(&self, name: &str) -> Result<Option<StoredEvidence>, StoreError> {
        // One transaction reads one state, whatever is written meanwhile.
        let mut transaction = self.begin_read().await?;
        let Some(network) = find(&mut transaction, name).await? else { return Ok(None) };
        let snapshots: Vec<(String, String)> =
            query("SELECT as_of, degree_counts FROM snapshots WHERE network = $1 ORDER BY as_of")
                .bind(name)
                .fetch_all(&mut transaction)
                .await?;
        let transitions: Vec<(String, String, String)> =
            query("SELECT starts_at, ends_at, counts FROM transitions WHERE network = $1 ORDER BY starts_at")
                .bind(name)
                .fetch_all(&mut transaction)
                .await?;
        let link_events = query_scalar("SELECT statistics FROM link_events WHERE network = $1")
            .bind(name)
            .fetch_optional(&mut transaction)
            .await?;
        let digest = backtests::digest(&mut transaction, name).await?;
        let questions = questions::all(&mut transaction, name).await?;
        let dated = |(as_of, counts): (String, String)| Ok((date(&as_of)?, counts));
        let framed = |(from, to, counts): (String, String, String)| Ok((date(&from)?, date(&to)?, counts));
        Ok(Some(StoredEvidence {
            network,
            snapshots: snapshots.into_iter().map(dated).collect::<Result<_, StoreError>>()?,
            transitions: transitions.into_iter().map(framed).collect::<Result<_, StoreError>>()?,
            link_events,
            questions,
            digest,
        }))
    }
}

/// The settings of a network, if it is tracked.
pub(super) async fn find(connection: &mut Connection, name: &str) -> Result<Option<StoredNetwork>, StoreError> {
    let row: Option<NetworkRow> = query(
        "SELECT name, degree_kind, description, tag, created_at, updated_at, entry_degrees, forecast_plan, revision, \
         refresh_state, refresh_job, refresh_reason FROM networks WHERE name = $1",
    )
    .bind(name)
    .fetch_optional(connection)
    .await?;
    row.map(StoredNetwork::try_from).transpose()
}

/// The refresh that follows from new settings, if one does.
async fn follow(
    connection: &mut Connection,
    network: &NewNetwork,
    stored: Option<&StoredNetwork>,
) -> Result<Option<Uuid>, StoreError> {
    let read =
        |settings: &NewNetwork| (settings.degree_kind, settings.entry_degrees.clone(), settings.forecast_plan.clone());
    if stored.is_none_or(|stored| read(&stored.settings) != read(network)) {
        return Ok(changed(connection, &network.name).await?.1);
    }
    let pending: bool = query_scalar(
        "SELECT EXISTS (SELECT 1 FROM networks WHERE name = $1 AND forecast_plan IS NOT NULL AND (refresh_state = 'outdated' \
         OR refresh_state = 'current' AND NOT EXISTS (SELECT 1 FROM latest_forecasts WHERE network = $1)))",
    )
    .bind(network.name.as_str())
    .fetch_one(&mut *connection)
    .await?;
    if pending { enqueue(connection, &network.name).await } else { Ok(None) }
}

async fn has_evidence(connection: &mut Connection, name: &str) -> Result<bool, StoreError> {
    let found: bool = query_scalar(
        "SELECT EXISTS (SELECT 1 FROM snapshots WHERE network = $1) \
         OR EXISTS (SELECT 1 FROM transitions WHERE network = $1) \
         OR EXISTS (SELECT 1 FROM link_events WHERE network = $1)",
    )
    .bind(name)
    .fetch_one(connection)
    .await?;
    Ok(found)
}

impl TryFrom<NetworkRow> for StoredNetwork {
    type Error = StoreError;

    fn try_from(row: NetworkRow) -> Result<Self, StoreError> {
        Ok(Self {
            created_at: time(row.created_at)?,
            updated_at: time(row.updated_at)?,
            revision: unsigned("revision", row.revision)?,
            refresh: match (row.refresh_state, row.refresh_job) {
                (Some(state), Some(job)) => Some(RefreshStatus {
                    state: RefreshState::named(&state)?,
                    job: uuid(&job)?,
                    reason: row.refresh_reason,
                }),
                _ => None,
            },
            settings: NewNetwork {
                degree_kind: kind(&row.degree_kind)?,
                name: row.name,
                description: row.description,
                entry_degrees: row.entry_degrees,
                forecast_plan: row.forecast_plan,
                tag: row.tag,
            },
        })
    }
}

impl TryFrom<SummaryRow> for NetworkSummary {
    type Error = StoreError;

    fn try_from(row: SummaryRow) -> Result<Self, StoreError> {
        Ok(Self {
            network: row.network.try_into()?,
            snapshots: unsigned("snapshots", row.snapshots)?,
            newest: row.newest.as_deref().map(date).transpose()?,
            transitions: unsigned("transitions", row.transitions)?,
            link_events: row.link_events > 0,
        })
    }
}

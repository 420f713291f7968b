//! What is stored of tracked networks, as it is answered.

use serde::Serialize;
use serde_json::value::RawValue;
use utoipa::ToSchema;
use uuid::Uuid;

use crate::api::ApiError;
use crate::api::extract::ResultFormat;
use crate::api::representation::entity_tag;
use crate::api::requests::{DegreeKindName, ForecastPlanBody, degree_pairs, move_rows};
use crate::service::{
    Count, NetworkSummary, NewNetwork, RefreshState, RefreshStatus, SnapshotSummary, StoredLinkEvents, StoredSnapshot,
    StoredTransitions, TransitionsSummary, date_text,
};

/// A tracked network's settings.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct NetworkAnswer {
    /// The network.
    name: String,
    /// What a degree counts.
    degree_kind: DegreeKindName,
    /// Words for people.
    description: Option<String>,
    /// `[degree, share]` pairs: the degrees newcomers arrive with; null when they are read from the data.
    #[schema(value_type = Option<Vec<Vec<f64>>>)]
    entry_degrees: Option<Box<RawValue>>,
    /// What is asked of its forecasts; null when none are made.
    #[schema(value_type = Option<ForecastPlanBody>)]
    forecast_plan: Option<Box<RawValue>>,
}

/// A tracked network's settings as they are stored now.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct StoredNetworkAnswer {
    /// The settings.
    #[serde(flatten)]
    network: NetworkAnswer,
    /// Strong validator of the settings, as in ETag.
    etag: String,
}

/// A network's line in a list.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct NetworkLine {
    /// The settings.
    #[serde(flatten)]
    network: StoredNetworkAnswer,
    /// When it was first stored, RFC 3339.
    #[schema(format = DateTime)]
    created_at: String,
    /// When its settings were last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
    /// Snapshots stored.
    snapshots: u64,
    /// Date of the newest snapshot stored.
    newest_snapshot: Option<String>,
    /// Tables of transitions stored.
    transitions: u64,
    /// Whether link events are stored.
    link_events: bool,
    /// How its latest forecast stands; null before there was anything to forecast by.
    refresh: Option<RefreshAnswer>,
}

/// How a network's latest forecast stands to what is stored.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct RefreshAnswer {
    /// How it stands.
    state: RefreshStateName,
    /// The refresh that says so, at `/v1/jobs/{id}`.
    job: Uuid,
    /// Why there is no newer forecast; null unless outdated.
    reason: Option<String>,
}

/// How a network's latest forecast stands to what is stored.
#[derive(Debug, Clone, Copy, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
enum RefreshStateName {
    /// It is being made anew.
    Refreshing,
    /// It stands on all that is stored.
    Current,
    /// No newer one could be made.
    Outdated,
}

/// Networks, in the order of their names.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct NetworkPage {
    /// The networks.
    pub items: Vec<NetworkLine>,
}

/// A snapshot.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct SnapshotAnswer {
    /// The date its counts hold for.
    as_of: String,
    /// Nodes.
    nodes: u64,
    /// Link ends.
    link_ends: Count,
    /// Largest degree of any node.
    largest_degree: u64,
    /// `[degree, nodes]` pairs, degrees ascending.
    #[schema(schema_with = degree_pairs)]
    degree_counts: Box<RawValue>,
}

/// A snapshot's line in a list.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct SnapshotLine {
    /// The date its counts hold for.
    #[schema(examples("2026-06-01"))]
    as_of: String,
    /// Nodes.
    nodes: u64,
    /// Link ends.
    link_ends: Count,
    /// Largest degree of any node.
    largest_degree: u64,
    /// Distinct degrees.
    degrees: u64,
    /// Strong validator of its JSON form, as in ETag.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// Snapshots, oldest first.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct SnapshotPage {
    /// The snapshots.
    pub items: Vec<SnapshotLine>,
}

/// A table of transitions.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct TransitionTableAnswer {
    /// The earlier date.
    from: String,
    /// The later date.
    to: String,
    /// Nodes present at both dates.
    stayed: u64,
    /// Nodes that arrived.
    arrived: u64,
    /// Nodes that departed.
    departed: u64,
    /// `[degree before, degree after, nodes]` rows, ascending; null before: arrived since, null after: departed.
    #[schema(schema_with = move_rows)]
    counts: Box<RawValue>,
}

/// A table's line in a list.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct TransitionsLine {
    /// The earlier date.
    #[schema(examples("2026-05-01"))]
    from: String,
    /// The later date.
    #[schema(examples("2026-06-01"))]
    to: String,
    /// Nodes present at both dates.
    stayed: u64,
    /// Nodes that arrived.
    arrived: u64,
    /// Nodes that departed.
    departed: u64,
    /// Rows.
    rows: u64,
    /// Strong validator of its JSON form, as in ETag.
    etag: String,
    /// When it was last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

/// Tables of transitions, oldest first.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct TransitionsPage {
    /// The tables.
    pub items: Vec<TransitionsLine>,
}

/// What is stored of a network's link events.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct LinkEventsLine {
    /// Landing ends.
    landings: u64,
    /// Ratio classes and cells.
    rows: u64,
    /// Strong validator, as in ETag.
    etag: String,
    /// When they were last stored, RFC 3339.
    #[schema(format = DateTime)]
    updated_at: String,
}

impl TryFrom<NewNetwork> for NetworkAnswer {
    type Error = ApiError;

    fn try_from(stored: NewNetwork) -> Result<Self, ApiError> {
        Ok(Self {
            name: stored.name,
            degree_kind: stored.degree_kind.into(),
            description: stored.description,
            entry_degrees: stored.entry_degrees.map(raw).transpose()?,
            forecast_plan: stored.forecast_plan.map(raw).transpose()?,
        })
    }
}

impl TryFrom<NewNetwork> for StoredNetworkAnswer {
    type Error = ApiError;

    fn try_from(stored: NewNetwork) -> Result<Self, ApiError> {
        Ok(Self { etag: etag(&stored.tag), network: stored.try_into()? })
    }
}

impl TryFrom<NetworkSummary> for NetworkLine {
    type Error = ApiError;

    fn try_from(found: NetworkSummary) -> Result<Self, ApiError> {
        Ok(Self {
            created_at: found.network.created_at.to_string(),
            updated_at: found.network.updated_at.to_string(),
            refresh: found.network.refresh.map(RefreshAnswer::from),
            network: found.network.settings.try_into()?,
            snapshots: found.snapshots,
            newest_snapshot: found.newest.map(date_text),
            transitions: found.transitions,
            link_events: found.link_events,
        })
    }
}

impl From<RefreshStatus> for RefreshAnswer {
    fn from(status: RefreshStatus) -> Self {
        let state = match status.state {
            RefreshState::Refreshing => RefreshStateName::Refreshing,
            RefreshState::Current => RefreshStateName::Current,
            RefreshState::Outdated => RefreshStateName::Outdated,
        };
        Self { state, job: status.job, reason: status.reason }
    }
}

impl TryFrom<StoredSnapshot> for SnapshotAnswer {
    type Error = ApiError;

    fn try_from(stored: StoredSnapshot) -> Result<Self, ApiError> {
        Ok(Self {
            as_of: date_text(stored.summary.as_of),
            nodes: stored.summary.nodes,
            link_ends: Count(stored.summary.link_ends as f64),
            largest_degree: stored.summary.largest_degree,
            degree_counts: raw(stored.degree_counts)?,
        })
    }
}

impl From<SnapshotSummary> for SnapshotLine {
    fn from(stored: SnapshotSummary) -> Self {
        Self {
            as_of: date_text(stored.as_of),
            nodes: stored.nodes,
            link_ends: Count(stored.link_ends as f64),
            largest_degree: stored.largest_degree,
            degrees: stored.rows,
            etag: etag(&stored.tag),
            updated_at: stored.updated_at.to_string(),
        }
    }
}

impl TryFrom<StoredTransitions> for TransitionTableAnswer {
    type Error = ApiError;

    fn try_from(stored: StoredTransitions) -> Result<Self, ApiError> {
        Ok(Self {
            from: date_text(stored.summary.from),
            to: date_text(stored.summary.to),
            stayed: stored.summary.stayed,
            arrived: stored.summary.arrived,
            departed: stored.summary.departed,
            counts: raw(stored.counts)?,
        })
    }
}

impl From<TransitionsSummary> for TransitionsLine {
    fn from(stored: TransitionsSummary) -> Self {
        Self {
            from: date_text(stored.from),
            to: date_text(stored.to),
            stayed: stored.stayed,
            arrived: stored.arrived,
            departed: stored.departed,
            rows: stored.rows,
            etag: etag(&stored.tag),
            updated_at: stored.updated_at.to_string(),
        }
    }
}

impl From<StoredLinkEvents> for LinkEventsLine {
    fn from(stored: StoredLinkEvents) -> Self {
        Self {
            landings: stored.landings,
            rows: stored.rows,
            etag: etag(&stored.tag),
            updated_at: stored.updated_at.to_string(),
        }
    }
}

pub fn etag(tag: &str) -> String {
    entity_tag(tag, ResultFormat::Json)
}

pub fn raw(json: String) -> Result<Box<RawValue>, ApiError> {
    RawValue::from_string(json).map_err(|error| ApiError::Broken(format!("what is stored is not JSON: {error}")))
}

//! What is sent: an event as CloudEvents 1.0 has it, in the JSON format.

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use crate::service::{DriftCauseName, Real, ServiceError};
use crate::store::{NoticeKind, PendingEvent};

/// An event (CloudEvents 1.0, JSON event format). A repeat after a crash has the id of the first: drop what you have seen.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct EventAnswer {
    /// Version of CloudEvents.
    #[schema(examples("1.0"))]
    pub specversion: &'static str,
    /// Id, the same at every attempt, also in the header `webhook-id`.
    pub id: Uuid,
    /// The network's address.
    #[schema(examples("/v1/networks/heronsgate"))]
    pub source: String,
    /// What happened.
    #[serde(rename = "type")]
    pub kind: EventType,
    /// The limit's or the report's address under the network's.
    #[schema(examples("limits/fan-out"))]
    pub subject: String,
    /// When it was found, RFC 3339.
    #[schema(format = DateTime)]
    pub time: String,
    /// Media type of data.
    #[schema(examples("application/json"))]
    pub datacontenttype: &'static str,
    /// What there is to say.
    pub data: NoticeData,
}

/// What happened.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
pub enum EventType {
    /// The probability that a limit is crossed by its date has become greater than its risk, or is so at the first answer.
    #[serde(rename = "tailcast.limit.risk_passed")]
    RiskPassed,
    /// It is within its risk again.
    #[serde(rename = "tailcast.limit.within_again")]
    WithinAgain,
    /// Outcomes have begun to miss their intervals more often than chance allows.
    #[serde(rename = "tailcast.forecast.drift_began")]
    DriftBegan,
    /// They do no longer.
    #[serde(rename = "tailcast.forecast.drift_ended")]
    DriftEnded,
}

/// What there is to say.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(untagged)]
pub enum NoticeData {
    /// Of a limit.
    Limit(LimitNotice),
    /// Of drift.
    Drift(DriftNotice),
}

/// What there is to say of a limit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct LimitNotice {
    /// The network.
    pub network: String,
    /// The limit.
    pub limit: ToldLimit,
    /// Probability that it is crossed by its date.
    pub probability: Real,
    /// The same by the forecast before; null when that had no answer to this limit.
    #[serde(default)]
    #[schema(required = true)]
    pub probability_before: Option<Real>,
    /// Date by which it is crossed with probability 0.5; null: not by the farthest date looked at.
    pub crossing_median: Option<String>,
    /// The forecast.
    pub forecast: Uuid,
    /// Its address.
    #[schema(examples("/v1/forecasts/0190a0b0-0000-7000-8000-000000000001"))]
    pub forecast_address: String,
    /// In words.
    pub verdict: String,
    /// What must be known before acting.
    pub cautions: Vec<String>,
}

/// A limit that is told of.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ToldLimit {
    /// Its name.
    pub name: String,
    /// Links from which on a node counts.
    pub threshold: u64,
    /// The most nodes that are provided for.
    pub max_nodes: u64,
    /// The date up to which it must hold.
    pub by: String,
    /// Probability of a crossing that is put up with.
    pub risk: Real,
}

/// What there is to say of drift.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct DriftNotice {
    /// The network.
    pub network: String,
    /// Dates looked at.
    pub dates: u64,
    /// Those missed.
    pub missed: u64,
    /// Probability of at least so many, had the intervals been right.
    pub p_value: Real,
    /// The same after the forecast before; null before the first.
    #[serde(default)]
    #[schema(required = true)]
    pub p_value_before: Option<Real>,
    /// Level of the test: below it drift is warned of.
    pub test_level: Real,
    /// Likely causes; empty when drift ended.
    pub causes: Vec<DriftCauseName>,
    /// Where the report is.
    #[schema(examples("/v1/networks/heronsgate/accuracy"))]
    pub accuracy_address: String,
    /// In words.
    pub verdict: String,
    /// What must be known before acting.
    pub cautions: Vec<String>,
}

/// The text of an event, the same whenever it is written.
pub fn text(event: &PendingEvent) -> Result<String, ServiceError> {
    let never = |error: serde_json::Error| ServiceError::Broken(format!("an event that was never kept: {error}"));
    let before = event.figure_before.map(Real);
    let (data, subject) = match event.kind {
        NoticeKind::LimitRisk => {
            let news: LimitNotice = serde_json::from_str(&event.details).map_err(never)?;
            let subject = format!("limits/{}", event.about);
            (NoticeData::Limit(LimitNotice { probability_before: before, ..news }), subject)
        }
        NoticeKind::Drift => {
            let news: DriftNotice = serde_json::from_str(&event.details).map_err(never)?;
            (NoticeData::Drift(DriftNotice { p_value_before: before, ..news }), "accuracy".to_owned())
        }
    };
    let event = EventAnswer {
        specversion: "1.0",
        id: event.id,
        source: format!("/v1/networks/{}", event.network),
        kind: EventType::of(event.kind, event.raised),
        subject,
        time: event.created_at.to_string(),
        datacontenttype: "application/json",
        data,
    };
    serde_json::to_string(&event).map_err(|error| ServiceError::Broken(error.to_string()))
}

impl EventType {
    fn of(kind: NoticeKind, raised: bool) -> Self {
        match (kind, raised) {
            (NoticeKind::LimitRisk, true) => Self::RiskPassed,
            (NoticeKind::LimitRisk, false) => Self::WithinAgain,
            (NoticeKind::Drift, true) => Self::DriftBegan,
            (NoticeKind::Drift, false) => Self::DriftEnded,
        }
    }
}

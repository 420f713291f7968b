//! How a notice's events fare, in figures and in words.

use jiff::Timestamp;
use serde::Serialize;
use utoipa::ToSchema;

use super::Notices;
use crate::service::ServiceError;
use crate::store::{Deliveries, NoticeKind, StoredNotice};
use crate::webhook::Target;

/// A notice and how its events fare.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct NoticeAnswer {
    /// Its name.
    pub name: String,
    /// Where it goes.
    #[schema(examples("https://hooks.example.org/tailcast"))]
    pub url: String,
    /// What it tells.
    pub on: Vec<NoticeKindName>,
    /// How its events fare.
    pub deliveries: DeliveriesAnswer,
}

/// What a notice may tell.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum NoticeKindName {
    /// That the risk of a kept limit passes its line, or is within it again.
    LimitRisk,
    /// That forecasts begin to drift, or cease to.
    Drift,
}

/// How a notice's events fare.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct DeliveriesAnswer {
    /// In a word.
    pub state: DeliveryState,
    /// In words, and what to do where something is wrong.
    pub detail: String,
    /// Events that wait to be taken.
    pub pending: u64,
    /// Events that were taken.
    pub delivered: u64,
    /// Events that were given up: nobody was told.
    pub given_up: u64,
    /// When an event was last taken, RFC 3339.
    #[schema(format = DateTime)]
    pub last_delivered_at: Option<String>,
    /// When an event was last given up, RFC 3339.
    #[schema(format = DateTime)]
    pub last_given_up_at: Option<String>,
    /// When an attempt last failed, RFC 3339.
    #[schema(format = DateTime)]
    pub last_failed_at: Option<String>,
    /// Why it did.
    pub last_failure: Option<String>,
    /// When the oldest waiting event is tried next, RFC 3339.
    #[schema(format = DateTime)]
    pub next_attempt_at: Option<String>,
}

/// How a notice's events fare, in a word.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum DeliveryState {
    /// Nothing waits.
    Idle,
    /// An event waits for its first attempt.
    Waiting,
    /// Attempts fail and go on.
    Failing,
    /// The last event was given up.
    GivenUp,
    /// Its address is not among the destinations of this service any more.
    NotListed,
}

/// A notice, how it fares, and what tells this state from another.
#[derive(Debug, Clone)]
pub struct NoticeStanding {
    /// The notice.
    pub answer: NoticeAnswer,
    /// Validator of the notice itself, however its events fare.
    pub tag: String,
    /// When the notice was last stored.
    pub updated_at: Timestamp,
}

impl Notices {
    /// How a notice fares.
    pub(super) fn standing(&self, stored: StoredNotice) -> NoticeStanding {
        let StoredNotice { notice, deliveries } = stored;
        let listed = Target::new(&notice.url).is_ok_and(|target| self.refusal(&target).is_none());
        let (state, detail) = self.in_words(&deliveries, listed);
        let moment = |at: Option<Timestamp>| at.map(|at| at.to_string());
        NoticeStanding {
            answer: NoticeAnswer {
                name: notice.name,
                url: notice.url,
                on: notice.kinds.iter().copied().map(NoticeKindName::from).collect(),
                deliveries: DeliveriesAnswer {
                    state,
                    detail,
                    pending: deliveries.pending,
                    delivered: deliveries.delivered,
                    given_up: deliveries.given_up,
                    last_delivered_at: moment(deliveries.delivered_at),
                    last_given_up_at: moment(deliveries.given_up_at),
                    last_failed_at: moment(deliveries.failed_at),
                    last_failure: deliveries.failure,
                    next_attempt_at: moment(deliveries.due_at),
                },
            },
            tag: notice.tag,
            updated_at: notice.updated_at,
        }
    }

    fn in_words(&self, deliveries: &Deliveries, listed: bool) -> (DeliveryState, String) {
        let hours = self.config.attempts_for_hours;
        let why = deliveries.failure.as_deref().unwrap_or("no cause is known");
        let gave_up = deliveries.given_up_at.is_some() && deliveries.given_up_at > deliveries.delivered_at;
        if !listed {
            let detail = format!("nothing is sent: {}", ServiceError::NotListed);
            (DeliveryState::NotListed, detail)
        } else if deliveries.pending > 0 && deliveries.failures > 0 {
            let detail = format!(
                "{} attempts in a row failed, the last because: {why}. Each event is tried for {hours} hours; storing the notice again \
                 has it tried at once",
                deliveries.failures
            );
            (DeliveryState::Failing, detail)
        } else if deliveries.pending > 0 {
            (DeliveryState::Waiting, "an event is about to be sent".to_owned())
        } else if gave_up {
            let detail = format!(
                "the last event was given up after {hours} hours and nobody was told; the last attempt failed because: {why}. The \
                 network's limits and accuracy report say how things stand"
            );
            (DeliveryState::GivenUp, detail)
        } else {
            (DeliveryState::Idle, "nothing waits to be sent".to_owned())
        }
    }
}

impl From<NoticeKind> for NoticeKindName {
    fn from(kind: NoticeKind) -> Self {
        match kind {
            NoticeKind::LimitRisk => Self::LimitRisk,
            NoticeKind::Drift => Self::Drift,
        }
    }
}

//! How kept limits fare by a network's latest forecast.

use jiff::Timestamp;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;
use uuid::Uuid;

use super::{is_reached, limit_of};
use crate::model::Limit;
use crate::service::{LimitAnswer, Real, ServiceError, date_text};
use crate::store::{LatestForecast, RefreshState, StoredNetwork, StoredQuestion};

/// Relative difference up to which a risk is the one that was asked about: reading decimals may cost the last digit.
const SAME_RISK: f64 = 1e-12;

/// A kept limit and how it fares.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
pub struct KeptLimitAnswer {
    /// Its name.
    pub name: String,
    /// Links from which on a node counts.
    pub threshold: u64,
    /// The most nodes that are provided for.
    pub max_nodes: u64,
    /// The date up to which it must hold.
    #[schema(examples("2027-06-01"))]
    pub by: String,
    /// Probability of a crossing that is put up with.
    pub risk: Real,
    /// How its answer stands to what is stored.
    pub state: LimitState,
    /// How it fares; null when there is no answer to it as it is now.
    pub answer: Option<LimitAnswer>,
    /// The forecast that the answer is of, at `/v1/forecasts/{id}`; null without an answer.
    pub forecast: Option<Uuid>,
    /// The state in words, and what to do where there is no answer.
    pub detail: String,
}

/// How the answer to a kept limit stands to what is stored.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum LimitState {
    /// It stands on all that is stored.
    Current,
    /// It is of the forecast before; another is being made.
    Refreshing,
    /// No newer one could be made.
    Outdated,
    /// There is none yet.
    Waiting,
    /// The network has no forecast_plan, so none is made.
    NoPlan,
    /// The limit's date is not after the newest snapshot.
    DatePassed,
    /// The limit's date is farther than forecasts reach.
    OutOfReach,
}

/// A kept limit, how it fares, and what tells this state from another.
#[derive(Debug, Clone)]
pub struct LimitStanding {
    /// The limit.
    pub answer: KeptLimitAnswer,
    /// Validator of the limit itself, whatever its answer.
    pub tag: String,
    /// When the limit was last stored.
    pub updated_at: Timestamp,
    /// When limit or answer last changed, where that can be told.
    pub modified: Option<Timestamp>,
}

/// What limits are held against.
pub struct Standings {
    network: StoredNetwork,
    newest: Option<Timestamp>,
    latest: Option<Latest>,
}

/// The latest forecast, but for what does not matter here.
struct Latest {
    state: RefreshState,
    job: Uuid,
    run: Uuid,
    created_at: Timestamp,
    limits: Vec<LimitAnswer>,
}

impl Standings {
    /// Reads the latest forecast's answers.
    pub fn new(
        network: StoredNetwork,
        newest: Option<Timestamp>,
        latest: Option<LatestForecast>,
    ) -> Result<Self, ServiceError> {
        #[derive(Deserialize)]
        struct Answers {
            limits: Vec<LimitAnswer>,
        }
        let read = |latest: LatestForecast| {
            let answers: Answers = serde_json::from_str(&latest.run.document)
                .map_err(|error| ServiceError::Broken(format!("a forecast that was never kept: {error}")))?;
            let (run, created_at) = (latest.run.id, latest.run.created_at);
            Ok::<_, ServiceError>(Latest {
                state: latest.state,
                job: latest.job,
                run,
                created_at,
                limits: answers.limits,
            })
        };
        Ok(Self { network, newest, latest: latest.map(read).transpose()? })
    }

    /// How a limit fares.
    pub fn of(&self, question: &StoredQuestion) -> Result<LimitStanding, ServiceError> {
        let limit = limit_of(question)?;
        let found = self
            .latest
            .as_ref()
            .and_then(|latest| Some((latest, latest.limits.iter().find(|answer| is_of(answer, &limit))?)));
        let (state, detail) = self.state(&limit, found.is_some());
        let answered = matches!(state, LimitState::Current | LimitState::Refreshing | LimitState::Outdated);
        let found = found.filter(|_| answered);
        // A state may change without a moment of its own; a current answer is as new as its forecast.
        let modified = found.filter(|_| state == LimitState::Current);
        let modified = modified.map(|(latest, _)| latest.created_at.max(question.updated_at));
        let answer = KeptLimitAnswer {
            name: question.name.clone(),
            threshold: limit.threshold(),
            max_nodes: limit.max_nodes(),
            by: date_text(limit.by()),
            risk: Real(limit.risk()),
            state,
            answer: found.map(|(_, answer)| answer.clone()),
            forecast: found.map(|(latest, _)| latest.run),
            detail,
        };
        Ok(LimitStanding { answer, tag: question.tag.clone(), updated_at: question.updated_at, modified })
    }

    fn state(&self, limit: &Limit, answered: bool) -> (LimitState, String) {
        if self.network.settings.forecast_plan.is_none() {
            let detail = "the network has no forecast_plan: store one with its settings to have this limit answered, or POST a \
                          forecast with limits of its own";
            return (LimitState::NoPlan, detail.to_owned());
        }
        if let Some(newest) = self.newest {
            let (by, newest_text) = (date_text(limit.by()), date_text(newest));
            if limit.by() <= newest {
                let detail = format!(
                    "its date has passed: {by} is not after the newest snapshot ({newest_text}); store it with a later date, \
                     or delete it"
                );
                return (LimitState::DatePassed, detail);
            }
            if !is_reached(limit.by(), newest) {
                let detail = format!(
                    "{by} is farther from the newest snapshot ({newest_text}) than forecasts reach; store it with a nearer date"
                );
                return (LimitState::OutOfReach, detail);
            }
        }
        let refresh = self.network.refresh.as_ref();
        let state = self.latest.as_ref().map(|latest| (latest.state, latest.job));
        let reason = refresh.and_then(|refresh| refresh.reason.as_deref()).map(|reason| reason.trim_end_matches('.'));
        match (state.or(refresh.map(|refresh| (refresh.state, refresh.job))), answered) {
            (None, _) => (LimitState::Waiting, "nothing was stored yet that a forecast could start from".into()),
            (Some((RefreshState::Refreshing, job)), true) => {
                (LimitState::Refreshing, format!("by the forecast before; another is being made: /v1/jobs/{job}"))
            }
            (Some((RefreshState::Refreshing, job)), false) => {
                (LimitState::Waiting, format!("its answer is being made: wait for /v1/jobs/{job}, or ask again"))
            }
            (Some((RefreshState::Current, _)), true) => {
                (LimitState::Current, "by the latest forecast, which stands on all that is stored".into())
            }
            (Some((RefreshState::Current, _)), false) => {
                let detail = "the forecast that answered it was deleted: the next change, or storing the network's settings \
                              again, makes another";
                (LimitState::Waiting, detail.into())
            }
            (Some((RefreshState::Outdated, _)), true) => {
                (LimitState::Outdated, format!("no newer forecast could be made: {}", reason.unwrap_or("see its jobs")))
            }
            (Some((RefreshState::Outdated, _)), false) => {
                (LimitState::Waiting, format!("no forecast could be made: {}", reason.unwrap_or("see its jobs")))
            }
        }
    }
}

/// Whether an answer is to the limit as it is now.
fn is_of(answer: &LimitAnswer, limit: &Limit) -> bool {
    answer.name.as_deref() == limit.name()
        && (answer.threshold, answer.max_nodes) == (limit.threshold(), limit.max_nodes())
        && answer.by == date_text(limit.by())
        && (answer.risk.0 - limit.risk()).abs() <= SAME_RISK * limit.risk()
}

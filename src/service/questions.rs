//! Limits and scenarios that are kept with a network.

mod standing;

use jiff::Timestamp;
use serde::{Deserialize, Serialize};

use super::network::NameFault;
use super::networks::cut;
use super::numbers::date_of;
use super::{NetworkName, Real, Service, ServiceError, Thing, Written, date_text, in_own_task, sha256_hex};
use crate::model::{ForecastPlan, Levels, Limit, MAX_LIMITS, MAX_SCENARIOS, Thresholds};
use crate::store::{QuestionKind, StoredQuestion};
use standing::Standings;

pub use standing::{KeptLimitAnswer, LimitStanding, LimitState};

/// The name of a kept limit or scenario: like a network's, what addresses take unescaped.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct QuestionName(NetworkName);

impl QuestionName {
    /// Checks a name.
    ///
    /// # Errors
    /// When it is empty or too long, or holds another character.
    pub fn new(text: &str) -> Result<Self, NameFault> {
        NetworkName::new(text).map(Self)
    }

    /// The text.
    pub fn as_str(&self) -> &str {
        self.0.as_str()
    }
}

/// A limit as it is kept; its name stands beside it.
#[derive(Serialize, Deserialize)]
struct LimitTerms {
    threshold: u64,
    max_nodes: u64,
    by: String,
    risk: Real,
}

impl Service {
    /// Keeps a limit; a refresh answers it. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, the network has as many as one run takes, or the database fails.
    pub async fn put_limit(
        &self,
        network: NetworkName,
        name: QuestionName,
        limit: &Limit,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<StoredQuestion> {
        let terms = LimitTerms {
            threshold: limit.threshold(),
            max_nodes: limit.max_nodes(),
            by: date_text(limit.by()),
            risk: Real(limit.risk()),
        };
        let body = serde_json::to_string(&terms).map_err(|error| ServiceError::Broken(error.to_string()))?;
        self.put_question(network, (QuestionKind::Limit, name, body), MAX_LIMITS as u64, allows).await
    }

    /// Keeps a scenario: `body` is what it changes, as JSON. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// As [`Self::put_limit`].
    pub async fn put_scenario(
        &self,
        network: NetworkName,
        name: QuestionName,
        body: String,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<StoredQuestion> {
        self.put_question(network, (QuestionKind::Scenario, name, body), MAX_SCENARIOS as u64, allows).await
    }

    async fn put_question(
        &self,
        network: NetworkName,
        (kind, name, body): (QuestionKind, QuestionName, String),
        most: u64,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Written<StoredQuestion> {
        self.check_tables().await?;
        let tag = sha256_hex(body.as_bytes());
        let mut question =
            StoredQuestion { kind, name: name.as_str().to_owned(), tag, body, updated_at: Timestamp::now() };
        let service = self.clone();
        in_own_task(async move {
            let change = service.store.put_question(network.as_str(), &question, most, allows).await;
            let change = change.map_err(|error| ServiceError::from_write(error, thing(kind)))?;
            service.start_refresh(change.refresh);
            question.updated_at = change.stands_since.unwrap_or(question.updated_at);
            Ok((question, change.made))
        })
        .await
    }

    /// A kept limit, and how it fares by the latest forecast. Nothing is computed.
    ///
    /// # Errors
    /// When there is no such network or limit, or the database fails.
    pub async fn limit(&self, network: &NetworkName, name: &QuestionName) -> Result<LimitStanding, ServiceError> {
        let question = self.question(network, QuestionKind::Limit, name).await?;
        self.standing(network, &question).await
    }

    /// A kept limit that is at hand and how it fares by the network's latest forecast.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn standing(&self, network: &NetworkName, limit: &StoredQuestion) -> Result<LimitStanding, ServiceError> {
        self.standings(network).await?.of(limit)
    }

    /// Kept limits whose name comes after `after`, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn limits(
        &self,
        network: &NetworkName,
        after: Option<QuestionName>,
        limit: u32,
    ) -> Result<(Vec<LimitStanding>, bool), ServiceError> {
        let (found, more) = self.questions(network, QuestionKind::Limit, after, limit).await?;
        let standings = self.standings(network).await?;
        Ok((found.iter().map(|question| standings.of(question)).collect::<Result<_, _>>()?, more))
    }

    /// A kept scenario.
    ///
    /// # Errors
    /// When there is no such network or scenario, or the database fails.
    pub async fn scenario(&self, network: &NetworkName, name: &QuestionName) -> Result<StoredQuestion, ServiceError> {
        self.question(network, QuestionKind::Scenario, name).await
    }

    /// Kept scenarios whose name comes after `after`, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn scenarios(
        &self,
        network: &NetworkName,
        after: Option<QuestionName>,
        limit: u32,
    ) -> Result<(Vec<StoredQuestion>, bool), ServiceError> {
        self.questions(network, QuestionKind::Scenario, after, limit).await
    }

    /// Deletes a limit or scenario. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or question, `allows` refuses, or the database fails.
    pub async fn delete_question(
        &self,
        network: NetworkName,
        (kind, name): (QuestionKind, QuestionName),
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let service = self.clone();
        in_own_task(async move {
            let done = service.store.delete_question(network.as_str(), kind, name.as_str(), allows).await;
            service.start_refresh(done.map_err(|error| ServiceError::from_write(error, thing(kind)))?);
            Ok(())
        })
        .await
    }

    async fn question(
        &self,
        network: &NetworkName,
        kind: QuestionKind,
        name: &QuestionName,
    ) -> Result<StoredQuestion, ServiceError> {
        match self.store.find_question(network.as_str(), kind, name.as_str()).await? {
            Some(found) => Ok(found),
            None => self.network(network).await.and(Err(ServiceError::NotFound(thing(kind)))),
        }
    }

    async fn questions(
        &self,
        network: &NetworkName,
        kind: QuestionKind,
        after: Option<QuestionName>,
        limit: u32,
    ) -> Result<(Vec<StoredQuestion>, bool), ServiceError> {
        self.network(network).await?;
        let after = after.as_ref().map(QuestionName::as_str);
        let found = self.store.list_questions(network.as_str(), kind, after, limit.saturating_add(1)).await?;
        Ok(cut(found, limit))
    }

    async fn standings(&self, network: &NetworkName) -> Result<Standings, ServiceError> {
        let stored = self.network(network).await?;
        let newest = self.store.newest_date(network.as_str()).await?;
        // Last: what a refresh stores meanwhile makes an answer newer, never its state older.
        Standings::new(stored, newest, self.store.find_latest(network.as_str()).await?)
    }
}

/// The kept limits that a forecast from the newest snapshot answers: those whose date it reaches.
pub fn limits_from(questions: &[StoredQuestion], newest: Timestamp) -> Result<Vec<Limit>, ServiceError> {
    let limits = questions.iter().filter(|question| question.kind == QuestionKind::Limit).map(limit_of);
    let mut limits = limits.collect::<Result<Vec<_>, _>>()?;
    limits.retain(|limit| is_reached(limit.by(), newest));
    Ok(limits)
}

/// Whether a forecast from the newest snapshot reaches a date.
fn is_reached(by: Timestamp, newest: Timestamp) -> bool {
    Thresholds::new(&[1]).is_ok_and(|any| ForecastPlan::new(newest, any, &[by], Levels::default()).is_ok())
}

fn limit_of(question: &StoredQuestion) -> Result<Limit, ServiceError> {
    let never = |why: &dyn std::fmt::Display| ServiceError::Broken(format!("a limit that was never kept: {why}"));
    let terms: LimitTerms = serde_json::from_str(&question.body).map_err(|error| never(&error))?;
    let by = date_of(&terms.by).ok_or_else(|| never(&terms.by))?;
    let limit = Limit::new(Some(question.name.clone()), terms.threshold, terms.max_nodes, by, terms.risk.0);
    limit.map_err(|_| never(&question.body))
}

fn thing(kind: QuestionKind) -> Thing {
    match kind {
        QuestionKind::Limit => Thing::Limit,
        QuestionKind::Scenario => Thing::Scenario,
    }
}

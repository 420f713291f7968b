//! Notices: calls to other machines when a limit's risk passes its line or forecasts drift.

mod event;
mod sender;
mod signals;
mod standing;

use std::sync::Arc;

use serde::Serialize;
use tokio::sync::Notify;

use super::networks::cut;
use super::questions::QuestionName;
use super::{NetworkName, Service, ServiceError, Thing, in_own_task, sha256_hex};
use crate::config::NoticesConfig;
use crate::store::{NewNotice, NoticeKind, kept_now};
use crate::webhook::Target;

pub use event::{DriftNotice, EventAnswer, EventType, LimitNotice, NoticeData, ToldLimit};
pub use standing::{DeliveriesAnswer, DeliveryState, NoticeAnswer, NoticeKindName, NoticeStanding};

/// Most notices of one network.
pub const MAX_NOTICES: u64 = 10;

/// What all notices share.
#[derive(Debug, Clone)]
pub struct Notices {
    config: Arc<NoticesConfig>,
    /// Tells the sender that an event came, or that one is to be tried now.
    wake: Arc<Notify>,
}

/// A notice as it is asked for.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NoticeTerms {
    /// Where it goes.
    pub target: Target,
    /// What it tells; at least one.
    pub kinds: Vec<NoticeKind>,
}

impl Notices {
    /// By these settings.
    pub fn new(config: &NoticesConfig) -> Self {
        Self { config: Arc::new(config.clone()), wake: Arc::new(Notify::new()) }
    }

    /// Why notices may not go to an address; none when they may.
    fn refusal(&self, target: &Target) -> Option<ServiceError> {
        let listed = &self.config.destinations;
        if listed.is_empty() {
            return Some(ServiceError::NoticesOff);
        }
        (!listed.iter().any(|destination| destination.takes(target))).then_some(ServiceError::NotListed)
    }
}

impl Service {
    /// Keeps a notice; true when there was none of its name. It tells what changes from the next forecast on. `allows` is asked about the
    /// validator of what stands there.
    ///
    /// # Errors
    /// When notices may not go there, there is no such network, `allows` refuses, the network has as many as it may, or the database
    /// fails.
    pub async fn put_notice(
        &self,
        network: NetworkName,
        name: QuestionName,
        terms: &NoticeTerms,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(NoticeStanding, bool), ServiceError> {
        self.check_tables().await?;
        // First: whether there is such a network is not for this to hide.
        self.network(&network).await?;
        if let Some(refusal) = self.notices.refusal(&terms.target) {
            return Err(refusal);
        }
        let notice = to_store(&name, terms)?;
        let service = self.clone();
        in_own_task(async move {
            let made = service.store.put_notice(network.as_str(), &notice, MAX_NOTICES, allows).await;
            let made = made.map_err(|error| ServiceError::from_write(error, Thing::Notice))?;
            service.notices.wake.notify_one();
            Ok((service.notice(&network, &name).await?, made))
        })
        .await
    }

    /// A notice and how its events fare.
    ///
    /// # Errors
    /// When there is no such network or notice, or the database fails.
    pub async fn notice(&self, network: &NetworkName, name: &QuestionName) -> Result<NoticeStanding, ServiceError> {
        match self.store.find_notice(network.as_str(), name.as_str()).await? {
            Some(found) => Ok(self.notices.standing(found)),
            None => self.network(network).await.and(Err(ServiceError::NotFound(Thing::Notice))),
        }
    }

    /// Notices whose name comes after `after`, and whether more follow.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn list_notices(
        &self,
        network: &NetworkName,
        after: Option<QuestionName>,
        limit: u32,
    ) -> Result<(Vec<NoticeStanding>, bool), ServiceError> {
        self.network(network).await?;
        let after = after.as_ref().map(QuestionName::as_str);
        let found = self.store.list_notices(network.as_str(), after, limit.saturating_add(1)).await?;
        let (found, more) = cut(found, limit);
        Ok((found.into_iter().map(|notice| self.notices.standing(notice)).collect(), more))
    }

    /// Deletes a notice, with its events that wait. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or notice, `allows` refuses, or the database fails.
    pub async fn delete_notice(
        &self,
        network: NetworkName,
        name: QuestionName,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let store = self.store.clone();
        in_own_task(async move {
            let done = store.delete_notice(network.as_str(), name.as_str(), allows).await;
            done.map_err(|error| ServiceError::from_write(error, Thing::Notice))
        })
        .await
    }
}

fn to_store(name: &QuestionName, terms: &NoticeTerms) -> Result<NewNotice, ServiceError> {
    #[derive(Serialize)]
    struct Tagged<'a> {
        url: &'a str,
        on: Vec<&'static str>,
    }
    let url = terms.target.as_str();
    let kinds: Vec<NoticeKind> =
        [NoticeKind::LimitRisk, NoticeKind::Drift].into_iter().filter(|kind| terms.kinds.contains(kind)).collect();
    let tagged = Tagged { url, on: kinds.iter().map(|kind| kind.as_str()).collect() };
    let text = serde_json::to_vec(&tagged).map_err(|error| ServiceError::Broken(error.to_string()))?;
    Ok(NewNotice {
        name: name.as_str().to_owned(),
        tag: sha256_hex(&text),
        url: url.to_owned(),
        kinds,
        updated_at: kept_now(),
    })
}

//! Tracked networks: their settings.

use super::{NetworkName, NetworkSettings, Service, ServiceError, Thing, in_own_task};
use crate::store::{NetworkSummary, NewNetwork, StoredNetwork};

impl Service {
    /// Stores a network's settings; true when it is new. A refresh follows where they change what a forecast follows from.
    /// `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When `allows` refuses, the kind of degree would change under stored counts, or the database fails.
    pub async fn put_network(
        &self,
        name: &NetworkName,
        settings: &NetworkSettings,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(NewNetwork, bool), ServiceError> {
        self.check_tables().await?;
        let network = settings.to_stored(name).map_err(|error| ServiceError::Broken(error.to_string()))?;
        let service = self.clone();
        in_own_task(async move {
            let change = service.store.put_network(&network, allows).await;
            let change = change.map_err(|error| ServiceError::from_write(error, Thing::Network))?;
            service.start_refresh(change.refresh);
            Ok((network, change.made))
        })
        .await
    }

    /// A network's settings.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn network(&self, name: &NetworkName) -> Result<StoredNetwork, ServiceError> {
        self.store.find_network(name.as_str()).await?.ok_or(ServiceError::NotFound(Thing::Network))
    }

    /// Networks whose name comes after `after`, and whether more follow; for a key that is bound to networks, `seen_by`, only those.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn networks(
        &self,
        after: Option<NetworkName>,
        limit: u32,
        seen_by: Option<String>,
    ) -> Result<(Vec<NetworkSummary>, bool), ServiceError> {
        let after = after.as_ref().map(NetworkName::as_str);
        let found = self.store.list_networks(after, limit.saturating_add(1), seen_by.as_deref()).await?;
        Ok(cut(found, limit))
    }

    /// Deletes a network and all that is stored of it, and calls its jobs off; its runs stay. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, or the database fails.
    pub async fn delete_network(
        &self,
        name: NetworkName,
        allows: impl FnOnce(Option<&str>) -> bool + Send + 'static,
    ) -> Result<(), ServiceError> {
        let (store, jobs) = (self.store.clone(), self.jobs.clone());
        in_own_task(async move {
            let done = store.delete_network(name.as_str(), allows).await;
            let called_off = done.map_err(|error| ServiceError::from_write(error, Thing::Network))?;
            called_off.into_iter().for_each(|job| jobs.call_off(job));
            Ok(())
        })
        .await
    }
}

/// A page of at most `limit` items, and whether there was one more.
pub(super) fn cut<T>(mut found: Vec<T>, limit: u32) -> (Vec<T>, bool) {
    let wanted = limit as usize;
    let more = found.len() > wanted;
    found.truncate(wanted);
    (found, more)
}

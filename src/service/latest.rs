//! A network's latest forecast.

use super::{NetworkName, RefreshState, Service, ServiceError};
use crate::store::LatestForecast;

impl Service {
    /// A network's latest forecast, of whatever state.
    ///
    /// # Errors
    /// When there is no such network, it has no forecast yet, or the database fails.
    pub async fn latest_forecast(&self, name: &NetworkName) -> Result<LatestForecast, ServiceError> {
        if let Some(latest) = self.store.find_latest(name.as_str()).await? {
            return Ok(latest);
        }
        let network = self.network(name).await?;
        let why = match network.refresh {
            _ if network.settings.forecast_plan.is_none() => {
                "it has no forecast_plan: store one with its settings, and a forecast is made of whatever is stored"
                    .to_owned()
            }
            Some(refresh) if refresh.state == RefreshState::Refreshing => {
                format!("its first one is being made: wait for /v1/jobs/{}, or ask again", refresh.job)
            }
            Some(refresh) => match refresh.reason {
                Some(reason) => format!("the last refresh gave none: {}", reason.trim_end_matches('.')),
                None => {
                    "it was deleted: the next change, or storing the network's settings again, makes another".to_owned()
                }
            },
            None => "nothing was stored since it has a plan".to_owned(),
        };
        Err(ServiceError::NoForecast(why))
    }
}

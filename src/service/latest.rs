//! A network's latest forecast.

use std::sync::Arc;
use std::time::Duration;

use jiff::{SignedDuration, Timestamp, Unit, tz::TimeZone};
use tokio::sync::watch;

use super::{NetworkName, RefreshState, Service, ServiceError, plan};
use crate::store::{LatestForecast, LatestStamp, WriteCounts};

/// Share of the time between two snapshots for which a forecast may be used without asking: what is polled is late by no more.
const SHARE_OF_CADENCE: u32 = 100;
/// Longest time that a forecast may be used without asking.
const MOST_UNASKED: Duration = Duration::from_secs(3600);

/// A network's latest forecast, and how long it may be used without asking again.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PolledForecast {
    /// The forecast.
    pub forecast: LatestForecast,
    /// What tells this state from another.
    pub stamp: LatestStamp,
    /// For how long it may be used without asking, whole seconds; nothing while another one is being made.
    pub unasked: Duration,
}

impl Service {
    /// The writes of this process by network: as long as a network's count stands, its latest forecast has not changed, but for what
    /// other processes write.
    pub fn write_counts(&self) -> Arc<WriteCounts> {
        self.store.counts()
    }

    /// Counts the writes of this process.
    pub fn commits(&self) -> watch::Receiver<u64> {
        self.store.commits()
    }

    /// What tells the present state of a network's latest forecast from another; none when there is none.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn latest_stamp(&self, name: &NetworkName) -> Result<Option<LatestStamp>, ServiceError> {
        Ok(self.store.latest_stamp(name.as_str()).await?)
    }

    /// A network's latest forecast for those who poll it.
    ///
    /// # Errors
    /// As [`Self::latest_forecast`].
    pub async fn polled_forecast(&self, name: &NetworkName) -> Result<PolledForecast, ServiceError> {
        let Some(found) = self.store.find_latest_with_cadence(name.as_str()).await? else {
            return Err(self.no_forecast(name).await?);
        };
        let unasked = match found.forecast.state {
            RefreshState::Refreshing => Duration::ZERO,
            RefreshState::Current | RefreshState::Outdated => {
                let cadence = match cadence(&found.newest) {
                    Some(cadence) => Some(cadence),
                    None => found.plan.as_deref().map(|plan| step(plan, found.newest.first())).transpose()?.flatten(),
                };
                unasked(cadence)
            }
        };
        Ok(PolledForecast { forecast: found.forecast, stamp: found.stamp, unasked })
    }

    /// A network's latest forecast, of whatever state.
    ///
    /// # Errors
    /// When there is no such network, it has no forecast yet, or the database fails.
    pub async fn latest_forecast(&self, name: &NetworkName) -> Result<LatestForecast, ServiceError> {
        if let Some(latest) = self.store.find_latest(name.as_str()).await? {
            return Ok(latest);
        }
        Err(self.no_forecast(name).await?)
    }

    /// Why a network has no latest forecast.
    async fn no_forecast(&self, name: &NetworkName) -> Result<ServiceError, ServiceError> {
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
        Ok(ServiceError::NoForecast(why))
    }
}

/// The shortest time between two of the newest snapshots, `dates` newest first; none of a single one.
fn cadence(dates: &[Timestamp]) -> Option<SignedDuration> {
    dates.iter().zip(dates.iter().skip(1)).map(|(newer, older)| newer.duration_since(*older)).min()
}

/// The step of a plan, in days as they are after the newest snapshot.
fn step(plan: &str, newest: Option<&Timestamp>) -> Result<Option<SignedDuration>, ServiceError> {
    let every = plan::from_json(plan)?.horizon.every;
    let from = newest.copied().unwrap_or_default().to_zoned(TimeZone::UTC);
    let seconds = every.total((Unit::Second, &from)).ok();
    Ok(seconds.and_then(|seconds| SignedDuration::try_from_secs_f64(seconds).ok()))
}

fn unasked(cadence: Option<SignedDuration>) -> Duration {
    let cadence = cadence.and_then(|cadence| Duration::try_from(cadence).ok()).unwrap_or_default();
    Duration::from_secs((cadence / SHARE_OF_CADENCE).min(MOST_UNASKED).as_secs())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_polled_is_late_by_a_hundredth_of_its_cadence() {
        let dates = |texts: &[&str]| texts.iter().map(|text| text.parse().unwrap()).collect::<Vec<Timestamp>>();
        for (texts, seconds) in [
            (&["2026-06-08T00:00:00Z", "2026-06-07T00:00:00Z", "2026-06-01T00:00:00Z"][..], 864),
            (&["2026-06-07T01:00:00Z", "2026-06-07T00:00:00Z"], 36),
            (&["2026-06-07T00:01:00Z", "2026-06-07T00:00:00Z"], 0),
            (&["2026-07-01T00:00:00Z", "2026-06-01T00:00:00Z"], 3600),
            (&["2026-07-01T00:00:00Z"], 0),
        ] {
            assert_eq!(unasked(cadence(&dates(texts))).as_secs(), seconds, "{texts:?}");
        }
    }
}

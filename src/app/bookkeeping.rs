//! What is stored now and then while the service runs: what access keys have used; and old lines of the trail of writes go.

use std::time::Duration;

use jiff::{SignedDuration, Timestamp};
use tokio::time::{MissedTickBehavior, interval};

use crate::service::Service;

/// Time between two saves of what keys have used: so much is forgotten when the process is killed.
const SAVE: Duration = Duration::from_secs(10);
/// Saves between two looks for old lines of the trail.
const SWEEP_EVERY: u64 = 360;

/// Keeps the books, for ever.
pub async fn keep_books(service: Service, audit_time: Duration) {
    let mut ticks = interval(SAVE);
    ticks.set_missed_tick_behavior(MissedTickBehavior::Delay);
    for round in 0_u64.. {
        ticks.tick().await;
        if let Err(error) = service.keys().save_uses().await {
            tracing::debug!(%error, "what access keys have used is stored the next time");
        }
        if round % SWEEP_EVERY == 0
            && let Some(oldest) =
                SignedDuration::try_from(audit_time).ok().and_then(|kept| Timestamp::now().checked_sub(kept).ok())
            && let Err(error) = service.sweep_audit(oldest).await
        {
            tracing::debug!(%error, "old lines of the trail of writes go the next time");
        }
    }
}

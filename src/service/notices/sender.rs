//! Sends what waits in the outbox: each notice's events in their order, several notices at a time, none of them held up by another.

use std::collections::HashMap;
use std::time::Duration;

use jiff::Timestamp;
use metrics::counter;
use tokio::sync::watch;
use tokio::task::{Id, JoinSet};
use tokio::time::sleep;
use uuid::Uuid;

use super::event;
use crate::config::NoticesConfig;
use crate::service::jobs::persistently;
use crate::service::{Service, ServiceError};
use crate::store::PendingEvent;
use crate::webhook::{Call, Target, Undelivered, deliver};

/// Notices that are called at the same time.
const MOST_AT_ONCE: usize = 8;
/// Longest sleep: what is due by the clock is found again after the clock was set.
const LONGEST_SLEEP: Duration = Duration::from_secs(60);
/// Pause when the database fails.
const STORE_PAUSE: Duration = Duration::from_secs(2);
/// How much longer than an attempt the claim on an event holds: to note how it went.
const CLAIM_MARGIN: Duration = Duration::from_secs(60);
/// Pauses are between 1 − this and 1 + this of what doubling says, so that many notices do not come back at one moment
/// (Brooker, "Exponential Backoff And Jitter", 2015), and each is still longer than the one before.
const JITTER: f64 = 0.25;

impl Service {
    /// Sends events until it is told to stop; those under way are finished then. What is not sent waits in the store.
    pub async fn send_notices(self, mut stop: watch::Receiver<bool>) {
        let mut calls = JoinSet::new();
        let mut called: HashMap<Id, Uuid> = HashMap::new();
        while !*stop.borrow() {
            let pause = match self.start_calls(&mut calls, &mut called).await {
                Ok(pause) => pause,
                // Until somebody runs the migrate command.
                Err(ServiceError::TablesOutdated) => LONGEST_SLEEP,
                Err(error) => {
                    tracing::warn!(%error, "events that wait cannot be read; it is tried again");
                    STORE_PAUSE
                }
            };
            tokio::select! {
                told = stop.changed() => if told.is_err() { break },
                () = self.notices.wake.notified() => {}
                () = sleep(pause) => {}
                Some(ended) = calls.join_next_with_id() => {
                    let id = ended.map_or_else(|error| error.id(), |(id, ())| id);
                    called.remove(&id);
                }
            }
        }
        while calls.join_next().await.is_some() {}
    }

    /// Starts what is due, as far as there are places; returns how long nothing else is.
    async fn start_calls(
        &self,
        calls: &mut JoinSet<()>,
        called: &mut HashMap<Id, Uuid>,
    ) -> Result<Duration, ServiceError> {
        // Those that are called stand among the first due.
        let wanted = u32::try_from(called.len().saturating_add(MOST_AT_ONCE)).unwrap_or(u32::MAX);
        let due = self.store.due_notices(wanted).await?;
        let longest = self.notices.config.longest_pause().mul_f64(1.0 + JITTER) + LONGEST_SLEEP;
        for next in due {
            if called.values().any(|&notice| notice == next.notice) {
                continue;
            }
            let wait = next.due_at.duration_since(Timestamp::now());
            // Further ahead than any pause: the clock went back, and the event would wait for it.
            if wait.is_positive() && wait.unsigned_abs() <= longest {
                return Ok(wait.unsigned_abs().min(LONGEST_SLEEP));
            }
            if called.len() >= MOST_AT_ONCE {
                // One that ends wakes the loop.
                break;
            }
            let service = self.clone();
            let call = calls.spawn(async move { service.call(next.notice).await });
            called.insert(call.id(), next.notice);
        }
        Ok(LONGEST_SLEEP)
    }

    /// Sends a notice's oldest event, and notes how that went.
    async fn call(&self, notice: Uuid) {
        if let Err(error) = self.send_oldest(notice).await {
            tracing::error!(%error, %notice, "how an event fared could not be noted; it is sent again, under the same id");
            // Not at once: a database that fails would have the same event sent without a pause.
            sleep(STORE_PAUSE).await;
        }
    }

    async fn send_oldest(&self, notice: Uuid) -> Result<(), ServiceError> {
        // Deleted meanwhile, or sent.
        let Some(mut event) = self.store.pending_event(notice).await? else {
            return Ok(self.store.nothing_due(notice).await?);
        };
        let until = later(Timestamp::now(), self.notices.config.timeout().saturating_add(CLAIM_MARGIN));
        if self.store.is_shared() && !self.store.claim_event(notice, &mut event, until).await? {
            // Another process sends it.
            return Ok(());
        }
        let sent = self.send(&event).await;
        let now = Timestamp::now();
        let Err(why) = sent else {
            counter!("tailcast_notices_total", "outcome" => "delivered").increment(1);
            return Ok(persistently(|| self.store.event_delivered(notice, event.id, now)).await?);
        };
        let config = &self.notices.config;
        let times = (later(now, pause(config, event.failures.saturating_add(1))), earlier(now, config.attempts_for()));
        let given_up = persistently(|| self.store.event_failed(notice, &event, (now, &why), times)).await?;
        counter!("tailcast_notices_total", "outcome" => "failed").increment(1);
        counter!("tailcast_notices_total", "outcome" => "given_up").increment(given_up);
        tracing::warn!(network = %event.network, notice = %event.name, event = %event.id, given_up, "a notice was not taken: {why}");
        Ok(())
    }

    /// Sends an event; otherwise says why not.
    async fn send(&self, event: &PendingEvent) -> Result<(), String> {
        let target = Target::new(&event.url).map_err(|fault| fault.to_string())?;
        if let Some(refusal) = self.notices.refusal(&target) {
            return Err(refusal.to_string());
        }
        let Some(secret) = &self.notices.config.secret else { return Err(ServiceError::NoticesOff.to_string()) };
        let body = event::text(event).map_err(|error| {
            tracing::error!(%error, event = %event.id, "an event cannot be written");
            Undelivered::Broken("the event cannot be written; the log has the cause".to_owned()).to_string()
        })?;
        let (id, timestamp) = (event.id.to_string(), Timestamp::now().as_second());
        let signature = secret.sign(&id, timestamp, &body);
        let call = Call { id, timestamp, signature, body };
        deliver(target, call, self.notices.config.timeout()).await.map_err(|why| why.to_string())
    }
}

fn pause(config: &NoticesConfig, failures: u64) -> Duration {
    let chance: f64 = rand::random();
    config.pause(failures).mul_f64(1.0 - JITTER + 2.0 * JITTER * chance)
}

/// So much later; the end of time at most.
fn later(now: Timestamp, pause: Duration) -> Timestamp {
    now.checked_add(pause).unwrap_or(Timestamp::MAX)
}

/// So much earlier; the beginning of time at least.
fn earlier(now: Timestamp, age: Duration) -> Timestamp {
    now.checked_sub(age).unwrap_or(Timestamp::MIN)
}

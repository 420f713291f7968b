//! Ids that grow: version 7 UUIDs (RFC 9562, section 5.7) that stay above all stored ones, whatever the clock does.

use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{SystemTime, UNIX_EPOCH};

use uuid::Uuid;
use uuid::timestamp::Timestamp;
use uuid::timestamp::context::ContextV7;

use super::statement::query_scalar;
use super::{Store, StoreError};

/// Milliseconds since 1970 that no id of this process lies below.
static FLOOR: AtomicU64 = AtomicU64::new(0);
/// Keeps ids of one millisecond, and those made after the clock went back, in order.
static ORDER: Mutex<ContextV7> = Mutex::new(ContextV7::new());

/// An id above every one that this process made or found stored: lists, cursors and streams of events go by the order of ids.
pub fn next_id() -> Uuid {
    let now = SystemTime::now().duration_since(UNIX_EPOCH).unwrap_or_default();
    let millis = u64::try_from(now.as_millis()).unwrap_or_default();
    let floor = FLOOR.fetch_max(millis, Ordering::Relaxed);
    let (seconds, nanos) = if millis >= floor {
        (now.as_secs(), now.subsec_nanos())
    } else {
        (floor / 1000, (floor % 1000) as u32 * 1_000_000)
    };
    Uuid::new_v7(Timestamp::from_unix(&ORDER, seconds, nanos))
}

impl Store {
    /// Has every later id of this process lie above those that are stored: the clock may have gone back since they were made.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn raise_ids(&self) -> Result<(), StoreError> {
        let newest: Vec<Option<String>> = query_scalar(
            "SELECT max(id) FROM runs UNION ALL SELECT max(id) FROM jobs UNION ALL SELECT max(id) FROM notice_events",
        )
        .fetch_all(&mut self.reader().await?)
        .await?;
        for id in newest.iter().flatten().filter_map(|id| Uuid::parse_str(id).ok()) {
            if let Some((seconds, nanos)) = id.get_timestamp().map(|time| time.to_unix()) {
                let millis = seconds.saturating_mul(1000).saturating_add(u64::from(nanos / 1_000_000));
                FLOOR.fetch_max(millis.saturating_add(1), Ordering::Relaxed);
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ids_grow_and_stay_above_the_floor() {
        let before = next_id();
        assert!(next_id() > before);
        // A day ahead of the clock, as after one that was set back.
        let floor = before.get_timestamp().map(|time| time.to_unix().0).unwrap() + 86_400;
        FLOOR.fetch_max(floor * 1000, Ordering::Relaxed);
        let ids: Vec<Uuid> = (0..100).map(|_| next_id()).collect();
        assert!(ids.is_sorted_by(|a, b| a < b));
        assert_eq!(ids[0].get_timestamp().map(|time| time.to_unix().0), Some(floor));
    }
}

//! What became of a network's refreshes since somebody last looked.

use jiff::Timestamp;
use uuid::Uuid;

use super::columns::{time, unsigned, uuid};
use super::networks::find;
use super::statement::{query, query_scalar};
use super::{Store, StoreError, StoredNetwork};

/// Most issued forecasts told at one look; the next look tells the next ones.
const MOST_AT_ONCE: i64 = 100;

/// What became of a network's refreshes.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RefreshNews {
    /// The network as it stands.
    pub network: StoredNetwork,
    /// Forecasts that refreshes issued, oldest first.
    pub issued: Vec<IssuedForecast>,
    /// Whether more of them follow.
    pub more: bool,
    /// When counts that an issued forecast stands on were last replaced or deleted.
    pub corrected_at: Option<Timestamp>,
}

/// A forecast that a refresh issued.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct IssuedForecast {
    /// The run.
    pub run: Uuid,
    /// The network's revision that it stands on.
    pub revision: u64,
}

impl Store {
    /// What became of a network's refreshes: forecasts issued after the run `after`, or the last one alone when nobody looked
    /// before. None when there is no such network.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn refresh_news(
        &self,
        network: &str,
        after: Option<Option<Uuid>>,
    ) -> Result<Option<RefreshNews>, StoreError> {
        // One transaction reads one state, whatever is written meanwhile.
        let mut transaction = self.begin_read().await?;
        let Some(stands) = find(&mut transaction, network).await? else { return Ok(None) };
        // Ids sort as the times they were made at.
        let text = match after {
            Some(_) => {
                "SELECT run_id, revision FROM network_runs WHERE network = $1 AND issued_to IS NOT NULL AND run_id > $2 \
                 ORDER BY run_id LIMIT $3"
            }
            None => {
                "SELECT run_id, revision FROM network_runs WHERE network = $1 AND issued_to IS NOT NULL AND run_id > $2 \
                 ORDER BY run_id DESC LIMIT $3"
            }
        };
        let limit = if after.is_some() { MOST_AT_ONCE } else { 1 };
        let rows: Vec<(String, i64)> = query(text)
            .bind(network)
            .bind(after.flatten().map(|run| run.to_string()).unwrap_or_default())
            .bind(limit)
            .fetch_all(&mut transaction)
            .await?;
        let corrected_at: Option<i64> = query_scalar(
            "SELECT max(evidence_corrected_at) FROM network_runs WHERE network = $1 AND issued_to IS NOT NULL",
        )
        .bind(network)
        .fetch_one(&mut transaction)
        .await?;
        let more = after.is_some() && rows.len() as i64 >= MOST_AT_ONCE;
        let issued = |(run, revision): (String, i64)| {
            Ok(IssuedForecast { run: uuid(&run)?, revision: unsigned("revision", revision)? })
        };
        Ok(Some(RefreshNews {
            network: stands,
            issued: rows.into_iter().map(issued).collect::<Result<_, StoreError>>()?,
            more,
            corrected_at: corrected_at.map(time).transpose()?,
        }))
    }
}

//! A network's latest forecast: a copy of its run in one row, for it is read far more often than it is made.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{date, time, unsigned, uuid};
use super::refreshes::RefreshState;
use super::runs::{NewRun, StoredRun};
use super::statement::{Connection, query, query_scalar};
use super::{Store, StoreError};

/// The read of the latest forecast: by the table's key, one row and nothing else.
const FIND: &str = "SELECT run_id, state, job, created_at, tag, document FROM latest_forecasts WHERE network = $1";

/// Of the same row, what stands before the forecast.
const STAMP: &str = "SELECT run_id, state, job, revision FROM latest_forecasts JOIN networks ON name = network \
                     WHERE network = $1";

/// A network's latest forecast.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LatestForecast {
    /// The run.
    pub run: StoredRun,
    /// How it stands to what is stored of the network.
    pub state: RefreshState,
    /// The refresh that says so.
    pub job: Uuid,
}

/// A network's latest forecast and what tells how often it changes, at one moment.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LatestWithCadence {
    /// The forecast.
    pub forecast: LatestForecast,
    /// What tells this state from another.
    pub stamp: LatestStamp,
    /// Dates of the newest snapshots, newest first, at most four.
    pub newest: Vec<Timestamp>,
    /// The network's plan, JSON.
    pub plan: Option<String>,
}

/// What tells one state of a network's latest forecast from another: run, state, refresh, and the network's revision.
#[derive(Debug, Clone, PartialEq, Eq, FromRow)]
pub struct LatestStamp {
    run_id: String,
    state: String,
    job: String,
    revision: i64,
}

/// A network's latest forecast but for the forecast.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LatestLine {
    /// The network.
    pub network: String,
    /// The run.
    pub run: Uuid,
    /// How it stands to what is stored of the network.
    pub state: RefreshState,
    /// When it was made.
    pub created_at: Timestamp,
}

#[derive(FromRow)]
struct LatestRow {
    run_id: String,
    state: String,
    job: String,
    created_at: i64,
    tag: String,
    document: String,
}

impl Store {
    /// The latest forecast of a network, if there is one.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_latest(&self, network: &str) -> Result<Option<LatestForecast>, StoreError> {
        let row: Option<LatestRow> = query(FIND).bind(network).fetch_optional(&mut self.reader().await?).await?;
        row.map(LatestForecast::try_from).transpose()
    }

    /// The latest forecast of a network, if there is one, with what tells how often it changes.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_latest_with_cadence(&self, network: &str) -> Result<Option<LatestWithCadence>, StoreError> {
        // One transaction reads one state, whatever is written meanwhile.
        let mut transaction = self.begin_read().await?;
        let row: Option<LatestRow> = query(FIND).bind(network).fetch_optional(&mut transaction).await?;
        let stamp: Option<LatestStamp> = query(STAMP).bind(network).fetch_optional(&mut transaction).await?;
        let (Some(row), Some(stamp)) = (row, stamp) else { return Ok(None) };
        let newest: Vec<String> =
            query_scalar("SELECT as_of FROM snapshots WHERE network = $1 ORDER BY as_of DESC LIMIT 4")
                .bind(network)
                .fetch_all(&mut transaction)
                .await?;
        let plan: Option<String> = query_scalar("SELECT forecast_plan FROM networks WHERE name = $1")
            .bind(network)
            .fetch_one(&mut transaction)
            .await?;
        let newest = newest.iter().map(|text| date(text)).collect::<Result<_, _>>()?;
        Ok(Some(LatestWithCadence { forecast: row.try_into()?, stamp, newest, plan }))
    }

    /// What tells the present state of a network's latest forecast from another; none when there is none. The forecast itself
    /// is not read.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn latest_stamp(&self, network: &str) -> Result<Option<LatestStamp>, StoreError> {
        Ok(query(STAMP).bind(network).fetch_optional(&mut self.reader().await?).await?)
    }

    /// Latest forecasts in the order of their networks' names, at most `limit`, and how many there are in all. No forecast itself
    /// is read.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_latest(&self, limit: u32) -> Result<(Vec<LatestLine>, u64), StoreError> {
        let mut transaction = self.begin_read().await?;
        let rows: Vec<(String, String, String, i64)> =
            query("SELECT network, run_id, state, created_at FROM latest_forecasts ORDER BY network LIMIT $1")
                .bind(i64::from(limit))
                .fetch_all(&mut transaction)
                .await?;
        let all: i64 = query_scalar("SELECT count(*) FROM latest_forecasts").fetch_one(&mut transaction).await?;
        let line = |(network, run, state, created_at): (String, String, String, i64)| {
            let (run, state) = (uuid(&run)?, RefreshState::named(&state)?);
            Ok(LatestLine { network, run, state, created_at: time(created_at)? })
        };
        Ok((rows.into_iter().map(line).collect::<Result<_, StoreError>>()?, unsigned("count", all)?))
    }
}

/// Puts a run in the place of the latest forecast.
pub(super) async fn replace(
    connection: &mut Connection,
    network: &str,
    run: &NewRun,
    job: Uuid,
) -> Result<(), StoreError> {
    query(
        "INSERT INTO latest_forecasts (network, run_id, state, job, created_at, tag, document) \
         VALUES ($1, $2, 'current', $3, $4, $5, $6) ON CONFLICT (network) DO UPDATE SET run_id = excluded.run_id, \
         state = excluded.state, job = excluded.job, created_at = excluded.created_at, tag = excluded.tag, \
         document = excluded.document",
    )
    .bind(network)
    .bind(run.id.to_string())
    .bind(job.to_string())
    .bind(run.created_at.as_microsecond())
    .bind(run.tag.as_str())
    .bind(run.document.as_str())
    .execute(connection)
    .await?;
    Ok(())
}

/// Notes how the latest forecast stands, if there is one.
pub(super) async fn note(
    connection: &mut Connection,
    network: &str,
    state: RefreshState,
    job: Uuid,
) -> Result<(), StoreError> {
    query("UPDATE latest_forecasts SET state = $2, job = $3 WHERE network = $1")
        .bind(network)
        .bind(state.as_str())
        .bind(job.to_string())
        .execute(connection)
        .await?;
    Ok(())
}

impl TryFrom<LatestRow> for LatestForecast {
    type Error = StoreError;

    fn try_from(row: LatestRow) -> Result<Self, StoreError> {
        let created_at: Timestamp = time(row.created_at)?;
        Ok(Self {
            run: StoredRun { id: uuid(&row.run_id)?, created_at, tag: row.tag, document: row.document },
            state: RefreshState::named(&row.state)?,
            job: uuid(&row.job)?,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::super::Home;
    use super::*;
    use crate::config::Config;

    #[tokio::test]
    async fn the_latest_forecast_is_one_row_found_by_its_key() {
        let folder = tempfile::tempdir().unwrap();
        let mut config = Config::from_sources(None, std::iter::empty()).unwrap();
        config.database.url = format!("sqlite://{}", folder.path().join("plan.db").display());
        let store = Store::connect(&config.database).await.unwrap();
        store.migrate().await.unwrap();
        let Home::Sqlite { read, .. } = &store.home else { unreachable!() };
        let steps: Vec<(i64, i64, i64, String)> =
            sqlx::query_as(sqlx::AssertSqlSafe(format!("EXPLAIN QUERY PLAN {FIND}")))
                .bind("heronsgate")
                .fetch_all(read)
                .await
                .unwrap();
        let steps: Vec<&str> = steps.iter().map(|step| step.3.as_str()).collect();
        assert_eq!(steps, ["SEARCH latest_forecasts USING INDEX sqlite_autoindex_latest_forecasts_1 (network=?)"]);
        store.close().await;
    }
}

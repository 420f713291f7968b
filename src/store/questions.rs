//! Limits and scenarios that are kept with a network.

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{corrupt, time};
use super::refreshes::{Change, changed};
use super::statement::{Connection, query, query_scalar};
use super::writes::{Caps, Scope, WriteError, network_exists, room_for_one};
use super::{Store, StoreError};

/// What kind of question is kept.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum QuestionKind {
    /// A limit: asked with each forecast of the network, so it changes what a forecast answers.
    Limit,
    /// A what-if: compared on demand.
    Scenario,
}

impl QuestionKind {
    fn as_str(self) -> &'static str {
        match self {
            Self::Limit => "limit",
            Self::Scenario => "scenario",
        }
    }

    fn named(name: &str) -> Result<Self, StoreError> {
        [Self::Limit, Self::Scenario]
            .into_iter()
            .find(|kind| kind.as_str() == name)
            .ok_or_else(|| corrupt("kind", name))
    }

    fn plural(self) -> &'static str {
        match self {
            Self::Limit => "limits",
            Self::Scenario => "scenarios",
        }
    }
}

/// A limit or scenario as it is kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct StoredQuestion {
    /// What it is.
    pub kind: QuestionKind,
    /// Its name, one of its kind in its network.
    pub name: String,
    /// SHA-256 of its body.
    pub tag: String,
    /// JSON.
    pub body: String,
    /// When it was last stored.
    pub updated_at: Timestamp,
}

#[derive(FromRow)]
struct QuestionRow {
    kind: String,
    name: String,
    tag: String,
    body: String,
    updated_at: i64,
}

impl Store {
    /// Stores a question in place of the one of its kind and name; nothing is changed when its body is the one that stands there. A
    /// limit takes on a refresh. `allows` is asked about the validator of what stands there.
    ///
    /// # Errors
    /// When there is no such network, `allows` refuses, the network has `most` of its kind, or the database fails.
    pub async fn put_question(
        &self,
        network: &str,
        question: &StoredQuestion,
        most: u64,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Change, WriteError> {
        let kind = question.kind;
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<(String, i64)> =
            query("SELECT tag, updated_at FROM kept_questions WHERE network = $1 AND kind = $2 AND name = $3")
                .bind(network)
                .bind(kind.as_str())
                .bind(question.name.as_str())
                .fetch_optional(&mut transaction)
                .await?;
        if !allows(stored.as_ref().map(|(tag, _)| tag.as_str())) {
            return Err(WriteError::Mismatch);
        }
        if let Some((tag, updated_at)) = &stored
            && *tag == question.tag
        {
            return Ok(Change { stands_since: Some(time(*updated_at)?), ..Change::default() });
        }
        if stored.is_none() {
            let count = query_scalar("SELECT count(*) FROM kept_questions WHERE network = $1 AND kind = $2");
            let count = count.bind(network).bind(kind.as_str()).fetch_one(&mut transaction).await?;
            room_for_one(kind.plural(), count, &Caps { dates: most, rows: 0 })?;
        }
        query(
            "INSERT INTO kept_questions (network, kind, name, created_at, updated_at, tag, body) \
             VALUES ($1, $2, $3, $4, $4, $5, $6) ON CONFLICT (network, kind, name) DO UPDATE SET \
             updated_at = CASE WHEN excluded.updated_at > kept_questions.created_at THEN \
             excluded.updated_at ELSE kept_questions.created_at END, \
             tag = excluded.tag, body = excluded.body",
        )
        .bind(network)
        .bind(kind.as_str())
        .bind(question.name.as_str())
        .bind(question.updated_at.as_microsecond())
        .bind(question.tag.as_str())
        .bind(question.body.as_str())
        .execute(&mut transaction)
        .await?;
        let refresh = followed(&mut transaction, network, kind).await?;
        self.commit(transaction).await?;
        Ok(Change { made: stored.is_none(), stands_since: None, refresh })
    }

    /// A question, if it is kept.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn find_question(
        &self,
        network: &str,
        kind: QuestionKind,
        name: &str,
    ) -> Result<Option<StoredQuestion>, StoreError> {
        let row: Option<QuestionRow> = query(
            "SELECT kind, name, tag, body, updated_at FROM kept_questions WHERE network = $1 AND kind = $2 AND name = $3",
        )
        .bind(network)
        .bind(kind.as_str())
        .bind(name)
        .fetch_optional(&mut self.reader().await?)
        .await?;
        row.map(StoredQuestion::try_from).transpose()
    }

    /// Questions of a kind whose name comes after `after`, in the order of their names.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn list_questions(
        &self,
        network: &str,
        kind: QuestionKind,
        after: Option<&str>,
        limit: u32,
    ) -> Result<Vec<StoredQuestion>, StoreError> {
        let rows: Vec<QuestionRow> = query(
            "SELECT kind, name, tag, body, updated_at FROM kept_questions \
             WHERE network = $1 AND kind = $2 AND name > $3 ORDER BY name LIMIT $4",
        )
        .bind(network)
        .bind(kind.as_str())
        .bind(after.unwrap_or_default())
        .bind(i64::from(limit))
        .fetch_all(&mut self.reader().await?)
        .await?;
        rows.into_iter().map(StoredQuestion::try_from).collect()
    }

    /// Deletes a question; returns the refresh that was taken on. `allows` is asked about its validator.
    ///
    /// # Errors
    /// When there is no such network or question, `allows` refuses, or the database fails.
    pub async fn delete_question(
        &self,
        network: &str,
        kind: QuestionKind,
        name: &str,
        allows: impl FnOnce(Option<&str>) -> bool,
    ) -> Result<Option<Uuid>, WriteError> {
        let mut transaction = self.begin(Scope::Network(network)).await?;
        network_exists(&mut transaction, network).await?;
        let stored: Option<String> =
            query_scalar("SELECT tag FROM kept_questions WHERE network = $1 AND kind = $2 AND name = $3")
                .bind(network)
                .bind(kind.as_str())
                .bind(name)
                .fetch_optional(&mut transaction)
                .await?;
        if !allows(Some(&stored.ok_or(WriteError::Missing)?)) {
            return Err(WriteError::Mismatch);
        }
        query("DELETE FROM kept_questions WHERE network = $1 AND kind = $2 AND name = $3")
            .bind(network)
            .bind(kind.as_str())
            .bind(name)
            .execute(&mut transaction)
            .await?;
        let refresh = followed(&mut transaction, network, kind).await?;
        self.commit(transaction).await?;
        Ok(refresh)
    }

    /// Date of the newest snapshot or end of transitions, the one a forecast starts from.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn newest_date(&self, network: &str) -> Result<Option<Timestamp>, StoreError> {
        let newest: Option<String> = query_scalar(
            "SELECT max(newest) FROM (SELECT max(as_of) AS newest FROM snapshots WHERE network = $1 \
             UNION ALL SELECT max(ends_at) AS newest FROM transitions WHERE network = $1) AS dates",
        )
        .bind(network)
        .fetch_one(&mut self.reader().await?)
        .await?;
        newest.as_deref().map(super::columns::date).transpose()
    }
}

/// All questions of a network, in the order of their names.
pub(super) async fn all(connection: &mut Connection, network: &str) -> Result<Vec<StoredQuestion>, StoreError> {
    let rows: Vec<QuestionRow> =
        query("SELECT kind, name, tag, body, updated_at FROM kept_questions WHERE network = $1 ORDER BY kind, name")
            .bind(network)
            .fetch_all(connection)
            .await?;
    rows.into_iter().map(StoredQuestion::try_from).collect()
}

/// The refresh that follows a change: limits are part of what a forecast answers, scenarios are not.
async fn followed(connection: &mut Connection, network: &str, kind: QuestionKind) -> Result<Option<Uuid>, StoreError> {
    match kind {
        QuestionKind::Limit => Ok(changed(connection, network).await?.1),
        QuestionKind::Scenario => Ok(None),
    }
}

impl TryFrom<QuestionRow> for StoredQuestion {
    type Error = StoreError;

    fn try_from(row: QuestionRow) -> Result<Self, StoreError> {
        Ok(Self {
            kind: QuestionKind::named(&row.kind)?,
            name: row.name,
            tag: row.tag,
            body: row.body,
            updated_at: time(row.updated_at)?,
        })
    }
}

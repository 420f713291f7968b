//! The outbox: events are written with the refresh that finds them, and wait until they are taken or given up.

use std::collections::HashMap;

use jiff::Timestamp;
use sqlx::FromRow;
use uuid::Uuid;

use super::columns::{time, unsigned, uuid};
use super::ids::next_id;
use super::notices::{NoticeKind, telling};
use super::statement::{Connection, query};
use super::writes::Scope;
use super::{Store, StoreError};

/// Events of one notice that are kept after they were taken or given up.
const KEPT_EVENTS: i64 = 100;

/// How something stands that notices may tell of.
#[derive(Debug, Clone, PartialEq)]
pub struct Signal {
    /// What kind of thing it is.
    pub kind: NoticeKind,
    /// The limit's name; empty for drift.
    pub about: String,
    /// Whether it is what notices warn of.
    pub raised: bool,
    /// The probability behind it.
    pub figure: f64,
    /// What was asked, as text: an answer to something else is no news of this.
    pub terms: String,
    /// What an event says of it, JSON.
    pub details: String,
}

/// A notice that has an event to send, and when.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct DueNotice {
    /// The notice.
    pub notice: Uuid,
    /// When its oldest event is to be tried.
    pub due_at: Timestamp,
}

/// The oldest event of a notice that waits.
#[derive(Debug, Clone, PartialEq)]
pub struct PendingEvent {
    /// Its id, for good.
    pub id: Uuid,
    /// Name of the notice.
    pub name: String,
    /// The notice's network.
    pub network: String,
    /// Where it goes.
    pub url: String,
    /// When it was due; storing the notice anew makes that another time.
    pub due_at: Timestamp,
    /// Attempts on the notice that failed since the last that did not.
    pub failures: u64,
    /// What kind of event it is.
    pub kind: NoticeKind,
    /// The limit's name; empty for drift.
    pub about: String,
    /// Whether it warns, or tells of a warning's end.
    pub raised: bool,
    /// The probability by the forecast before, if that had an answer to it.
    pub figure_before: Option<f64>,
    /// When it came to be.
    pub created_at: Timestamp,
    /// What it says, JSON.
    pub details: String,
}

#[derive(FromRow)]
struct StandingRow {
    about: String,
    raised: bool,
    figure: f64,
    terms: String,
}

#[derive(FromRow)]
struct EventRow {
    id: String,
    name: String,
    network: String,
    url: String,
    due_at: i64,
    failures: i64,
    kind: String,
    about: String,
    raised: bool,
    figure_before: Option<f64>,
    created_at: i64,
    details: String,
}

impl Store {
    /// Notices that have an event to send, the first due first.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn due_notices(&self, limit: u32) -> Result<Vec<DueNotice>, StoreError> {
        let rows: Vec<(String, i64)> =
            query("SELECT id, due_at FROM notices WHERE due_at IS NOT NULL ORDER BY due_at, id LIMIT $1")
                .bind(i64::from(limit))
                .fetch_all(&mut self.reader().await?)
                .await?;
        rows.into_iter().map(|(id, at)| Ok(DueNotice { notice: uuid(&id)?, due_at: time(at)? })).collect()
    }

    /// The oldest event of a notice that waits: each notice's events are sent in the order in which they came.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn pending_event(&self, notice: Uuid) -> Result<Option<PendingEvent>, StoreError> {
        let row: Option<EventRow> = query(
            "SELECT e.id, n.name, n.network, n.url, n.due_at, n.failures, e.kind, e.about, e.raised, e.figure_before, e.created_at, \
             e.details FROM notice_events e JOIN notices n ON n.id = e.notice WHERE e.notice = $1 AND e.state = 'pending' \
             AND n.due_at IS NOT NULL ORDER BY e.id LIMIT 1",
        )
        .bind(notice.to_string())
        .fetch_optional(&mut self.reader().await?)
        .await?;
        row.map(PendingEvent::try_from).transpose()
    }

    /// Notes that a notice has nothing to send, unless an event waits.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn nothing_due(&self, notice: Uuid) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::OfNotice(notice)).await?;
        query(
            "UPDATE notices SET due_at = NULL WHERE id = $1 AND NOT EXISTS (SELECT 1 FROM notice_events WHERE notice = $1 \
             AND state = 'pending')",
        )
        .bind(notice.to_string())
        .execute(&mut transaction)
        .await?;
        self.commit(transaction).await
    }

    /// Claims a notice's oldest event until `until`, for as long as another process has not: both saw it due at the same time. The event
    /// is due then, if nothing comes of this claim.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn claim_event(
        &self,
        notice: Uuid,
        event: &mut PendingEvent,
        until: Timestamp,
    ) -> Result<bool, StoreError> {
        let mut transaction = self.begin(Scope::OfNotice(notice)).await?;
        let claimed = query("UPDATE notices SET due_at = $3 WHERE id = $1 AND due_at = $2")
            .bind(notice.to_string())
            .bind(event.due_at.as_microsecond())
            .bind(until.as_microsecond())
            .execute(&mut transaction)
            .await?;
        self.commit(transaction).await?;
        event.due_at = until;
        Ok(claimed > 0)
    }

    /// Notes that an event was taken; the notice's next one is due at once.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn event_delivered(&self, notice: Uuid, event: Uuid, at: Timestamp) -> Result<(), StoreError> {
        let mut transaction = self.begin(Scope::OfNotice(notice)).await?;
        if take(&mut transaction, event).await? {
            query(
                "UPDATE notices SET delivered = delivered + 1, delivered_at = $2, failures = 0, due_at = CASE WHEN EXISTS \
                 (SELECT 1 FROM notice_events WHERE notice = $1 AND state = 'pending') THEN $2 END WHERE id = $1",
            )
            .bind(notice.to_string())
            .bind(at.as_microsecond())
            .execute(&mut transaction)
            .await?;
            prune(&mut transaction, notice).await?;
        }
        self.commit(transaction).await
    }

    /// Notes that an attempt failed, why, and when the next is due. Events of the notice from before `too_old` are given up, for where
    /// they go takes nothing: how many. A notice that was stored anew meanwhile keeps its own time: it was not tried as it is now.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn event_failed(
        &self,
        notice: Uuid,
        event: &PendingEvent,
        (at, why): (Timestamp, &str),
        (next_at, too_old): (Timestamp, Timestamp),
    ) -> Result<u64, StoreError> {
        let mut transaction = self.begin(Scope::OfNotice(notice)).await?;
        query("UPDATE notice_events SET attempts = attempts + 1 WHERE id = $1 AND state = 'pending'")
            .bind(event.id.to_string())
            .execute(&mut transaction)
            .await?;
        let noted = query(
            "UPDATE notices SET failures = failures + 1, failed_at = $2, failure = $3 WHERE id = $1 AND due_at = $4",
        )
        .bind(notice.to_string())
        .bind(at.as_microsecond())
        .bind(why)
        .bind(event.due_at.as_microsecond())
        .execute(&mut transaction)
        .await?;
        let mut given_up = 0;
        if noted > 0 {
            given_up = give_up(&mut transaction, notice, at, too_old).await?;
            query(
                "UPDATE notices SET due_at = CASE WHEN EXISTS (SELECT 1 FROM notice_events WHERE notice = $1 AND \
                 state = 'pending') THEN $2 END WHERE id = $1",
            )
            .bind(notice.to_string())
            .bind(next_at.as_microsecond())
            .execute(&mut transaction)
            .await?;
        }
        self.commit(transaction).await?;
        Ok(given_up)
    }
}

/// Ends the events of a notice that are too old; how many.
async fn give_up(
    connection: &mut Connection,
    notice: Uuid,
    at: Timestamp,
    too_old: Timestamp,
) -> Result<u64, StoreError> {
    let ended = query(
        "UPDATE notice_events SET state = 'given_up' WHERE notice = $1 AND state = 'pending' AND created_at <= $2",
    )
    .bind(notice.to_string())
    .bind(too_old.as_microsecond())
    .execute(&mut *connection)
    .await?;
    if ended > 0 {
        query("UPDATE notices SET given_up = given_up + $3, given_up_at = $2 WHERE id = $1")
            .bind(notice.to_string())
            .bind(at.as_microsecond())
            .bind(i64::try_from(ended).unwrap_or(i64::MAX))
            .execute(&mut *connection)
            .await?;
        prune(connection, notice).await?;
    }
    Ok(ended)
}

/// Holds how things stand against what each notice of the network last had to tell, and puts an event into the outbox for every
/// difference. `answered` says whether the limits among the signals are all that are answered now: of others nothing is known any more.
pub(super) async fn note(
    connection: &mut Connection,
    network: &str,
    refresh: Uuid,
    signals: &[Signal],
    answered: bool,
) -> Result<(), StoreError> {
    for kind in [NoticeKind::LimitRisk, NoticeKind::Drift] {
        let signals: Vec<&Signal> = signals.iter().filter(|signal| signal.kind == kind).collect();
        for notice in telling(connection, network, kind).await? {
            let told = standings(connection, notice, kind).await?;
            for signal in &signals {
                let before = told.get(&signal.about);
                let same = before.filter(|before| before.terms == signal.terms);
                if is_news(before.map(|before| before.raised), same.is_some(), signal.raised) {
                    insert(connection, notice, refresh, signal, same.map(|before| before.figure)).await?;
                }
                keep(connection, notice, signal).await?;
            }
            if kind == NoticeKind::LimitRisk && answered {
                for about in told.keys().filter(|about| !signals.iter().any(|signal| signal.about == **about)) {
                    forget(connection, notice, kind, about).await?;
                }
            }
        }
    }
    Ok(())
}

/// Whether there is something to tell: a warning begins or ends, or goes on under other terms.
fn is_news(before: Option<bool>, same_terms: bool, raised: bool) -> bool {
    let warned = before.unwrap_or(false);
    warned != raised || (raised && !same_terms)
}

async fn standings(
    connection: &mut Connection,
    notice: Uuid,
    kind: NoticeKind,
) -> Result<HashMap<String, StandingRow>, StoreError> {
    let rows: Vec<StandingRow> =
        query("SELECT about, raised, figure, terms FROM notice_standings WHERE notice = $1 AND kind = $2")
            .bind(notice.to_string())
            .bind(kind.as_str())
            .fetch_all(connection)
            .await?;
    Ok(rows.into_iter().map(|row| (row.about.clone(), row)).collect())
}

async fn insert(
    connection: &mut Connection,
    notice: Uuid,
    refresh: Uuid,
    signal: &Signal,
    figure_before: Option<f64>,
) -> Result<(), StoreError> {
    let now = Timestamp::now().as_microsecond();
    query(
        "INSERT INTO notice_events (id, notice, refresh, kind, about, raised, figure_before, created_at, state, details) \
         VALUES ($1, $2, $3, $4, $5, $6, $7, $8, 'pending', $9)",
    )
    .bind(next_id().to_string())
    .bind(notice.to_string())
    .bind(refresh.to_string())
    .bind(signal.kind.as_str())
    .bind(signal.about.as_str())
    .bind(signal.raised)
    .bind(figure_before)
    .bind(now)
    .bind(signal.details.as_str())
    .execute(&mut *connection)
    .await?;
    query("UPDATE notices SET due_at = coalesce(due_at, $2) WHERE id = $1")
        .bind(notice.to_string())
        .bind(now)
        .execute(connection)
        .await?;
    Ok(())
}

async fn keep(connection: &mut Connection, notice: Uuid, signal: &Signal) -> Result<(), StoreError> {
    query(
        "INSERT INTO notice_standings (notice, kind, about, raised, figure, terms) VALUES ($1, $2, $3, $4, $5, $6) \
         ON CONFLICT (notice, kind, about) DO UPDATE SET raised = excluded.raised, figure = excluded.figure, \
         terms = excluded.terms",
    )
    .bind(notice.to_string())
    .bind(signal.kind.as_str())
    .bind(signal.about.as_str())
    .bind(signal.raised)
    .bind(signal.figure)
    .bind(signal.terms.as_str())
    .execute(connection)
    .await?;
    Ok(())
}

async fn forget(connection: &mut Connection, notice: Uuid, kind: NoticeKind, about: &str) -> Result<(), StoreError> {
    query("DELETE FROM notice_standings WHERE notice = $1 AND kind = $2 AND about = $3")
        .bind(notice.to_string())
        .bind(kind.as_str())
        .bind(about)
        .execute(connection)
        .await?;
    Ok(())
}

/// Notes that an event that waits was taken; false when it does not wait.
async fn take(connection: &mut Connection, event: Uuid) -> Result<bool, StoreError> {
    let done = query("UPDATE notice_events SET state = 'delivered' WHERE id = $1 AND state = 'pending'")
        .bind(event.to_string())
        .execute(connection)
        .await?;
    Ok(done > 0)
}

async fn prune(connection: &mut Connection, notice: Uuid) -> Result<(), StoreError> {
    query(
        "DELETE FROM notice_events WHERE notice = $1 AND state <> 'pending' AND id NOT IN \
         (SELECT id FROM notice_events WHERE notice = $1 AND state <> 'pending' ORDER BY id DESC LIMIT $2)",
    )
    .bind(notice.to_string())
    .bind(KEPT_EVENTS)
    .execute(connection)
    .await?;
    Ok(())
}

impl TryFrom<EventRow> for PendingEvent {
    type Error = StoreError;

    fn try_from(row: EventRow) -> Result<Self, StoreError> {
        Ok(Self {
            id: uuid(&row.id)?,
            name: row.name,
            network: row.network,
            url: row.url,
            due_at: time(row.due_at)?,
            failures: unsigned("failures", row.failures)?,
            kind: NoticeKind::named(&row.kind)?,
            about: row.about,
            raised: row.raised,
            figure_before: row.figure_before,
            created_at: time(row.created_at)?,
            details: row.details,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn news_is_what_begins_ends_or_goes_on_under_other_terms() {
        // What was told before, whether under the same terms, how it stands, whether that is news.
        for (before, same, raised, news) in [
            (None, false, false, false),
            (None, false, true, true),
            (Some(false), true, false, false),
            (Some(false), true, true, true),
            (Some(false), false, true, true),
            (Some(true), true, true, false),
            (Some(true), false, true, true),
            (Some(true), true, false, true),
            (Some(true), false, false, true),
        ] {
            assert_eq!(is_news(before, same, raised), news, "{before:?} {same} {raised}");
        }
    }
}

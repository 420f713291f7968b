//! `/v1/networks/{name}/events`

use std::collections::VecDeque;
use std::convert::Infallible;
use std::time::Duration;

use axum::extract::{Path, State};
use axum::http::HeaderMap;
use axum::response::Response;
use axum::response::sse::Event;
use futures_util::stream;
use tokio::sync::{OwnedSemaphorePermit, watch};
use tokio::time::{sleep, timeout};
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use crate::api::extract::{NoQuery, accepts_events, network_name};
use crate::api::refusals::{FormRefusals, Refusals};
use crate::api::{ApiError, AppState};
use crate::service::{NetworkName, NetworkNews, NewsPlace, Service, ServiceError, Thing};

/// Shortest time between two looks: a burst of changes is told as one.
const PAUSE: Duration = Duration::from_millis(200);
/// Longest time between two looks: another process may write the same database.
const LOOK: Duration = Duration::from_secs(2);

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(get_network_events))
}

/// Follow a network's refreshes
///
/// A stream of Server-Sent Events, each a JSON object with `network` and `revision`: `refreshing` (something that is stored changed,
/// and the refresh `job` makes another forecast), `forecast` (one is stored: its id in `forecast`, and in `limits` how each limit
/// fares by it), `failed` (no newer one could be made: `reason`), `current` (the forecast there is stands on all that is stored),
/// `corrected` (counts that forecasts stand on were replaced or deleted), `deleted` (the network is gone; the stream ends). It begins
/// with how things stand. A client that comes back with Last-Event-ID is told every forecast since, and how things stand where
/// that has changed; states that came and went in between are left out.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/events",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("Last-Event-ID" = Option<String>, Header, description = "Id of the last event that was read; one that is none of ours \
            counts as none"),
    ),
    responses(
        (status = 200, description = "The stream", content((serde_json::Value = "text/event-stream"))),
        Refusals, FormRefusals,
    )
)]
async fn get_network_events(
    State(state): State<AppState>,
    Path(name): Path<String>,
    _query: NoQuery,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    accepts_events(&headers)?;
    let name = network_name(&name)?;
    let read = headers.get("last-event-id").and_then(|id| id.to_str().ok()?.parse().ok());
    let mut follower = Follower::new(state.service, name, read, state.streams.place()?);
    // Before the stream begins: a network that there is none of is a 404.
    follower.look().await?;
    Ok(state.streams.answer(stream::unfold(follower, Follower::next)))
}

/// Somebody who follows a network.
struct Follower {
    service: Service,
    name: NetworkName,
    commits: watch::Receiver<u64>,
    /// How far was read; nothing before the first look.
    read: Option<NewsPlace>,
    untold: VecDeque<NetworkNews>,
    /// Whether there is more to tell than was looked up at once.
    more: bool,
    ended: bool,
    _place: OwnedSemaphorePermit,
}

impl Follower {
    fn new(service: Service, name: NetworkName, read: Option<NewsPlace>, place: OwnedSemaphorePermit) -> Self {
        let commits = service.commits();
        Self { service, name, commits, read, untold: VecDeque::new(), more: false, ended: false, _place: place }
    }

    async fn look(&mut self) -> Result<(), ServiceError> {
        // What is written from here on is looked up next time.
        self.commits.mark_unchanged();
        let (news, read, more) = self.service.network_news(&self.name, self.read).await?;
        self.untold.extend(news);
        (self.read, self.more) = (Some(read), more);
        Ok(())
    }

    async fn next(mut self) -> Option<(Result<Event, Infallible>, Self)> {
        loop {
            if self.ended {
                return None;
            }
            if let Some(news) = self.untold.pop_front() {
                let event = Event::default().event(news.kind.as_str()).id(news.place.to_string());
                return Some((Ok(event.json_data(news).ok()?), self));
            }
            if !self.more {
                sleep(PAUSE).await;
                // Nothing new for so long is no failure; neither is a writer that is gone.
                let _ = timeout(LOOK, self.commits.changed()).await;
            }
            match self.look().await {
                Ok(()) => {}
                Err(ServiceError::NotFound(Thing::Network)) => {
                    self.ended = true;
                    let event = Event::default().event("deleted");
                    let told = serde_json::json!({"network": self.name.as_str()});
                    return Some((Ok(event.json_data(told).ok()?), self));
                }
                Err(error) => {
                    // The client comes back with the id of what it read last, and misses nothing.
                    tracing::warn!(%error, "a stream of events ended early");
                    return None;
                }
            }
        }
    }
}

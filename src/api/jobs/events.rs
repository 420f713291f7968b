//! How a job comes on, as Server-Sent Events (WHATWG HTML, section 9.2).

use std::convert::Infallible;
use std::time::Duration;

use axum::http::{HeaderMap, StatusCode};
use axum::response::sse::{Event, KeepAlive, Sse};
use axum::response::{IntoResponse, Response};
use futures_util::stream;
use tokio::sync::watch;
use tokio::time::sleep;

use super::JobAnswer;
use crate::service::{JobView, Service};

/// Shortest time between two events.
const PAUSE: Duration = Duration::from_millis(200);
/// Time between two looks at a job that nobody works at here.
const LOOK: Duration = Duration::from_secs(1);
/// Id of the last event: a client that comes back with it has read all there is.
const END: &str = "end";

/// Where a stream has come to.
enum Next {
    /// Tell this.
    Tell(Box<JobView>),
    /// Wait for something new.
    Wait,
    /// Nothing comes any more.
    End,
}

/// The stream of a job that stands as `view` says.
pub fn stream(service: Service, view: JobView, headers: &HeaderMap) -> Response {
    let read_before = headers.get("last-event-id").is_some_and(|id| id.as_bytes() == END.as_bytes());
    if read_before && !view.job.state.is_live() {
        // The answer that tells a client not to connect again.
        return StatusCode::NO_CONTENT.into_response();
    }
    let (id, pulse) = (view.job.id, service.job_pulse(view.job.id));
    let start = (service, pulse, Next::Tell(Box::new(view)));
    let events = stream::unfold(start, move |(service, mut pulse, next)| async move {
        let view = match next {
            Next::Tell(view) => *view,
            Next::End => return None,
            Next::Wait => {
                sleep(PAUSE).await;
                changed(&mut pulse).await;
                // What cannot be told any more ends the stream; the client reads the job again.
                service.job(id).await.ok()?
            }
        };
        let live = view.job.state.is_live();
        let event = Event::default().json_data(JobAnswer::from(view)).ok()?;
        let event = if live { event } else { event.id(END) };
        Some((Ok::<_, Infallible>(event), (service, pulse, if live { Next::Wait } else { Next::End })))
    });
    Sse::new(events).keep_alive(KeepAlive::default()).into_response()
}

/// Returns when the job has come on or ended.
async fn changed(pulse: &mut Option<watch::Receiver<f64>>) {
    match pulse {
        Some(watched) => {
            if watched.changed().await.is_err() {
                *pulse = None;
            }
        }
        None => sleep(LOOK).await,
    }
}

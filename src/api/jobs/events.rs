//! How a job comes on, as Server-Sent Events (WHATWG HTML, section 9.2).

use std::convert::Infallible;
use std::time::Duration;

use axum::http::{HeaderMap, StatusCode};
use axum::response::sse::Event;
use axum::response::{IntoResponse, Response};
use futures_util::stream;
use tokio::sync::watch;
use tokio::time::sleep;

use super::JobAnswer;
use crate::api::ApiError;
use crate::api::streams::Streams;
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
///
/// # Errors
/// When as many streams as configured are open.
pub fn stream(service: Service, streams: &Streams, view: JobView, headers: &HeaderMap) -> Result<Response, ApiError> {
    let read_before = headers.get("last-event-id").is_some_and(|id| id.as_bytes() == END.as_bytes());
    if read_before && !view.job.state.is_live() {
        // The answer that tells a client not to connect again.
        return Ok(StatusCode::NO_CONTENT.into_response());
    }
    let place = streams.place()?;
    let (id, pulse) = (view.job.id, service.job_pulse(view.job.id));
    let start = (service, place, pulse, Next::Tell(Box::new(view)));
    let events = stream::unfold(start, move |(service, place, mut pulse, next)| async move {
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
        Some((Ok::<_, Infallible>(event), (service, place, pulse, if live { Next::Wait } else { Next::End })))
    });
    Ok(streams.answer(events))
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

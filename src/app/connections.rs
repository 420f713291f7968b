//! Connections: accept, serve, and let go of those that ask for nothing.

use std::pin::Pin;
use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::task::{Context, Poll};
use std::time::Duration;

use axum::body::{Body, Bytes};
use axum::response::Response;
use axum::serve::Listener;
use hyper::body::{Frame, Incoming, SizeHint};
use hyper::header::CONTENT_TYPE;
use hyper::server::conn::http1;
use hyper::service::{Service, service_fn};
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::watch;
use tokio::task::JoinSet;

use crate::api::Front;

/// How long a connection without a request in work is kept after the stop: the time to flush its last answer.
const FLUSH: Duration = Duration::from_millis(500);

/// Serves until told to stop; returns when every connection has ended.
pub async fn serve(mut listener: TcpListener, front: Front, head_timeout: Duration, mut stop: watch::Receiver<bool>) {
    let mut open = JoinSet::new();
    loop {
        tokio::select! {
            _ = stopped(&mut stop) => break,
            // Waits and goes on when the system has no more connections to give.
            (stream, _) = Listener::accept(&mut listener) => {
                open.spawn(connection(stream, front.clone(), head_timeout, stop.clone()));
            }
            Some(_) = open.join_next() => {}
        }
    }
    drop(listener);
    while open.join_next().await.is_some() {}
}

/// Serves one connection. After the stop its request in work is finished; a request that has not come in full by then
/// is not waited for.
async fn connection(stream: TcpStream, front: Front, head_timeout: Duration, mut stop: watch::Receiver<bool>) {
    let in_work = Arc::new(AtomicUsize::new(0));
    let counted = in_work.clone();
    let service = service_fn(move |request: hyper::Request<Incoming>| {
        let in_work = InWork::new(counted.clone());
        let work = match front.at_once(request.method(), request.uri(), request.headers()) {
            Some(answer) => Err(answer),
            None => Ok(TowerToHyperService::new(front.router()).call(request)),
        };
        async move {
            match work {
                Err(answer) => Ok(in_work.until_sent(answer)),
                Ok(answer) => answer.await.map(|answer| in_work.until_sent(answer)),
            }
        }
    });
    let serving = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(head_timeout)
        .serve_connection(TokioIo::new(stream), service);
    tokio::pin!(serving);
    tokio::select! {
        // A connection that breaks is the client's affair.
        _ = serving.as_mut() => return,
        _ = stopped(&mut stop) => serving.as_mut().graceful_shutdown(),
    }
    loop {
        tokio::select! {
            _ = serving.as_mut() => return,
            () = tokio::time::sleep(FLUSH) => if in_work.load(Ordering::Relaxed) == 0 { return },
        }
    }
}

/// A request that counts as in work until it is dropped.
struct InWork(Arc<AtomicUsize>);

impl InWork {
    fn new(count: Arc<AtomicUsize>) -> Self {
        count.fetch_add(1, Ordering::Relaxed);
        Self(count)
    }

    /// The answer, in work until its body is sent. A stream of events has no end to wait for.
    fn until_sent(self, answer: Response) -> Response {
        match answer.headers().get(CONTENT_TYPE).is_some_and(|kind| kind == "text/event-stream") {
            true => answer,
            false => answer.map(|body| Body::new(Sending { body, _in_work: self })),
        }
    }
}

impl Drop for InWork {
    fn drop(&mut self) {
        self.0.fetch_sub(1, Ordering::Relaxed);
    }
}

/// A body on its way.
struct Sending {
    body: Body,
    _in_work: InWork,
}

impl hyper::body::Body for Sending {
    type Data = Bytes;
    type Error = axum::Error;

    fn poll_frame(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
    ) -> Poll<Option<Result<Frame<Bytes>, axum::Error>>> {
        Pin::new(&mut self.body).poll_frame(context)
    }

    fn is_end_stream(&self) -> bool {
        self.body.is_end_stream()
    }

    fn size_hint(&self) -> SizeHint {
        self.body.size_hint()
    }
}

async fn stopped(stop: &mut watch::Receiver<bool>) {
    // An error means that the sender is gone, which is a stop as well.
    let _ = stop.wait_for(|&stop| stop).await;
}

//! Connections: accept, serve, and let go of those that ask for nothing.

use std::io::{self, IoSlice};
use std::pin::Pin;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::task::{Context, Poll};
use std::time::Duration;

use axum::serve::Listener;
use hyper::body::Incoming;
use hyper::server::conn::http1;
use hyper::service::{Service, service_fn};
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
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

/// Serves one connection. After the stop its request in work is finished, and its answer sent to a client that reads; a request
/// that has not come in full by then is not waited for.
async fn connection(stream: TcpStream, front: Front, head_timeout: Duration, mut stop: watch::Receiver<bool>) {
    let in_work = Arc::new(AtomicUsize::new(0));
    let counted = in_work.clone();
    let service = service_fn(move |request: hyper::Request<Incoming>| {
        let work = match front.at_once(request.method(), request.uri(), request.headers()) {
            Some(answer) => Err(answer),
            None => {
                counted.fetch_add(1, Ordering::Relaxed);
                Ok((TowerToHyperService::new(front.router()).call(request), counted.clone()))
            }
        };
        async move {
            match work {
                Err(answer) => Ok(answer),
                Ok((answer, counted)) => {
                    let answer = answer.await;
                    counted.fetch_sub(1, Ordering::Relaxed);
                    answer
                }
            }
        }
    });
    let sending = Arc::new(AtomicBool::new(false));
    let stream = Watched { stream, sending: sending.clone() };
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
            () = tokio::time::sleep(FLUSH) => {
                if in_work.load(Ordering::Relaxed) == 0 && !sending.load(Ordering::Relaxed) {
                    return;
                }
            }
        }
    }
}

/// A connection that tells whether more is to be sent than the client has taken yet.
struct Watched {
    stream: TcpStream,
    sending: Arc<AtomicBool>,
}

impl Watched {
    fn written(&self, outcome: Poll<io::Result<usize>>) -> Poll<io::Result<usize>> {
        self.sending.store(outcome.is_pending(), Ordering::Relaxed);
        outcome
    }
}

impl AsyncRead for Watched {
    fn poll_read(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        buffer: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_read(context, buffer)
    }
}

impl AsyncWrite for Watched {
    fn poll_write(mut self: Pin<&mut Self>, context: &mut Context<'_>, bytes: &[u8]) -> Poll<io::Result<usize>> {
        let outcome = Pin::new(&mut self.stream).poll_write(context, bytes);
        self.written(outcome)
    }

    fn poll_write_vectored(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        pieces: &[IoSlice<'_>],
    ) -> Poll<io::Result<usize>> {
        let outcome = Pin::new(&mut self.stream).poll_write_vectored(context, pieces);
        self.written(outcome)
    }

    fn is_write_vectored(&self) -> bool {
        self.stream.is_write_vectored()
    }

    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_flush(context)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_shutdown(context)
    }
}

async fn stopped(stop: &mut watch::Receiver<bool>) {
    // An error means that the sender is gone, which is a stop as well.
    let _ = stop.wait_for(|&stop| stop).await;
}

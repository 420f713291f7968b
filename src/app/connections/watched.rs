//! A connection that knows whether its client takes what is sent.

use std::future::Future;
use std::io::{self, IoSlice};
use std::pin::Pin;
use std::sync::Arc;
use std::task::{Context, Poll};
use std::time::Duration;

use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::net::TcpStream;
use tokio::time::{Instant, Sleep, sleep};

use super::crowd::Activity;

/// What a client must take of a waiting answer in each pause, bytes. Somebody who takes a byte now and then would else keep an answer
/// in memory for as long as they like.
const LEAST: usize = 16 * 1024;

/// A connection that tells whether more is to be sent than the client has taken yet, and breaks when that lasts.
pub struct Watched {
    stream: TcpStream,
    activity: Arc<Activity>,
    pause: Duration,
    /// Runs since an answer began to wait, anew for each pause.
    waiting: Option<Pin<Box<Sleep>>>,
    /// What was taken since.
    taken: usize,
}

impl Watched {
    /// A connection whose client may take `pause` for each 16 KiB.
    pub fn new(stream: TcpStream, activity: Arc<Activity>, pause: Duration) -> Self {
        Self { stream, activity, pause, waiting: None, taken: 0 }
    }

    fn written(&mut self, context: &mut Context<'_>, outcome: Poll<io::Result<usize>>) -> Poll<io::Result<usize>> {
        self.activity.note_sending(outcome.is_pending());
        if let Poll::Ready(Ok(bytes)) = outcome {
            self.taken = self.taken.saturating_add(bytes);
            self.activity.note_sent();
        }
        if outcome.is_ready() {
            return outcome;
        }
        let pause = self.pause;
        let waiting = match &mut self.waiting {
            Some(waiting) => waiting,
            None => {
                self.taken = 0;
                self.waiting.insert(Box::pin(sleep(pause)))
            }
        };
        while waiting.as_mut().poll(context).is_ready() {
            if self.taken < LEAST {
                return Poll::Ready(Err(io::ErrorKind::TimedOut.into()));
            }
            self.taken = 0;
            waiting.as_mut().reset(Instant::now() + pause);
        }
        Poll::Pending
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
        self.written(context, outcome)
    }

    fn poll_write_vectored(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        pieces: &[IoSlice<'_>],
    ) -> Poll<io::Result<usize>> {
        let outcome = Pin::new(&mut self.stream).poll_write_vectored(context, pieces);
        self.written(context, outcome)
    }

    fn is_write_vectored(&self) -> bool {
        self.stream.is_write_vectored()
    }

    /// Asked for when all is written: nothing waits any more.
    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        self.waiting = None;
        Pin::new(&mut self.stream).poll_flush(context)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_shutdown(context)
    }
}

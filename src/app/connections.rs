//! Connections: accept, serve, and let go of those that ask for nothing, take nothing or are too many.

mod crowd;
mod watched;

use std::time::Duration;

use axum::http::HeaderValue;
use axum::http::header::CONNECTION;
use axum::response::Response;
use axum::serve::Listener;
use hyper::body::Incoming;
use hyper::server::conn::http1;
use hyper::service::{Service, service_fn};
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use socket2::{SockRef, TcpKeepalive};
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::watch;
use tokio::task::JoinSet;
use tokio::time::timeout;

use crate::api::Front;
use crate::config::HttpConfig;
use crowd::{Crowd, Member};
use watched::Watched;

/// How long a connection without a request in work is kept after the stop: the time to flush its last answer, or for the first
/// request of one that was just opened to come.
const FLUSH: Duration = Duration::from_millis(500);
/// Most bytes of a request's head; also what is read of a body at a time.
const HEAD_BYTES: usize = 64 * 1024;
/// Connections beyond the most on which clients are told so, and probes answered; those beyond these are closed at once.
const SPARE: usize = 64;
/// How long such a connection may last, and take to send its request's head.
const SPARE_TIME: Duration = Duration::from_secs(5);
const SPARE_HEAD: Duration = Duration::from_secs(1);
/// Most bytes that the system takes of an answer before the client has room for them. Of its own accord it takes megabytes, and then
/// nothing until a third of them has left: somebody who reads slowly would be taken for one who reads nothing.
#[cfg(target_os = "linux")]
const UNSENT_BYTES: u32 = 32 * 1024;
/// Unanswered signs of life after which the other end is taken to be gone.
const SIGNS: u32 = 3;

/// How connections are held.
#[derive(Debug, Clone, Copy)]
pub struct Terms {
    /// Open at the same time.
    pub most: usize,
    /// Longest time to send a request's head.
    pub head: Duration,
    /// Longest time in which nothing of an answer is taken.
    pub pause: Duration,
}

impl From<&HttpConfig> for Terms {
    fn from(config: &HttpConfig) -> Self {
        Self { most: config.max_connections, head: config.head_timeout(), pause: config.answer_pause() }
    }
}

/// Serves until told to stop; returns when every connection has ended.
pub async fn serve(mut listener: TcpListener, front: Front, terms: Terms, mut stop: watch::Receiver<bool>) {
    let crowd = Crowd::default();
    let mut open = JoinSet::new();
    loop {
        tokio::select! {
            _ = stopped(&mut stop) => break,
            // Waits and goes on when the system has no more connections to give.
            (stream, _) = Listener::accept(&mut listener) => {
                mind(&stream, terms.pause);
                if crowd.len() < terms.most || crowd.let_one_go() {
                    open.spawn(connection(stream, front.clone(), terms, crowd.join(), stop.clone()));
                } else if let Some(member) = crowd.join_spare(SPARE) {
                    open.spawn(spare(stream, front.clone(), member));
                }
            }
            Some(_) = open.join_next() => {}
        }
    }
    for stream in waiting(listener).take(terms.most) {
        mind(&stream, terms.pause);
        open.spawn(connection(stream, front.clone(), terms, crowd.join(), stop.clone()));
    }
    while open.join_next().await.is_some() {}
}

/// Connections that the system has taken on and nobody has accepted: closed with the listener, they would be reset, with the requests
/// that their clients have sent.
fn waiting(listener: TcpListener) -> impl Iterator<Item = TcpStream> {
    // It does not block: it was the runtime's.
    let listener = listener.into_std().ok();
    let next = move || listener.as_ref().and_then(|listener| listener.accept().ok());
    std::iter::from_fn(next).filter_map(|(stream, _)| {
        stream.set_nonblocking(true).ok()?;
        TcpStream::from_std(stream).ok()
    })
}

/// Has the system tell when the other end is gone without a word: what was sent is not acknowledged, or nothing comes back while all is
/// quiet.
fn mind(stream: &TcpStream, pause: Duration) {
    let socket = SockRef::from(stream);
    let quiet = TcpKeepalive::new().with_time(pause);
    #[cfg(target_os = "linux")]
    let quiet = quiet.with_interval((pause / SIGNS).max(Duration::from_secs(1))).with_retries(SIGNS);
    // Where a system does not take these, time limits of our own still hold.
    let _ = socket.set_tcp_keepalive(&quiet);
    #[cfg(target_os = "linux")]
    {
        let _ = socket.set_tcp_user_timeout(Some(pause));
        let _ = socket.set_tcp_notsent_lowat(UNSENT_BYTES);
    }
}

/// Serves one connection. After the stop its request in work is finished, and its answer sent to a client that reads; a request
/// that has not come in full by then is not waited for.
async fn connection(stream: TcpStream, front: Front, terms: Terms, member: Member, mut stop: watch::Receiver<bool>) {
    let activity = member.activity().clone();
    let counted = activity.clone();
    let service = service_fn(move |request: hyper::Request<Incoming>| {
        counted.note_heard();
        // Whoever sends the next request over a connection of its own finds the one who serves it.
        let parting = front.is_parting();
        let work = match front.at_once(request.method(), request.uri(), request.headers()) {
            Some(answer) => Err(answer),
            None => Ok((TowerToHyperService::new(front.router()).call(request), counted.begin())),
        };
        async move {
            let answer = match work {
                Err(answer) => Ok(answer),
                Ok((answer, in_work)) => {
                    let answer = answer.await;
                    drop(in_work);
                    answer
                }
            };
            answer.map(|mut answer: Response| {
                if parting {
                    answer.headers_mut().insert(CONNECTION, HeaderValue::from_static("close"));
                }
                answer
            })
        }
    });
    let stream = Watched::new(stream, activity.clone(), terms.pause);
    let serving = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(terms.head)
        .max_buf_size(HEAD_BYTES)
        .serve_connection(TokioIo::new(stream), service);
    tokio::pin!(serving);
    loop {
        tokio::select! {
            biased;
            // A connection that breaks is the client's affair.
            _ = serving.as_mut() => return,
            () = activity.asked_to_go() => {
                if activity.rests() {
                    return;
                }
                // A request has come meanwhile; it is the last.
                serving.as_mut().graceful_shutdown();
            }
            _ = stopped(&mut stop) => break,
        }
    }
    if activity.is_new() {
        tokio::select! {
            _ = serving.as_mut() => return,
            () = tokio::time::sleep(FLUSH) => {}
        }
    }
    serving.as_mut().graceful_shutdown();
    loop {
        tokio::select! {
            _ = serving.as_mut() => return,
            () = tokio::time::sleep(FLUSH) => {
                if activity.rests() {
                    return;
                }
            }
        }
    }
}

/// Answers one request of a connection that is one too many: probes as ever, what is under /v1 with a refusal.
async fn spare(stream: TcpStream, front: Front, member: Member) {
    let activity = member.activity().clone();
    let heard = activity.clone();
    let service = service_fn(move |request: hyper::Request<Incoming>| {
        heard.note_heard();
        let refusal = front.refused(request.method(), request.uri(), request.headers());
        let router = front.router();
        async move {
            match refusal {
                Some(refusal) => Ok(refusal),
                None => TowerToHyperService::new(router).call(request).await,
            }
        }
    });
    let serving = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(SPARE_HEAD)
        .max_buf_size(HEAD_BYTES)
        .keep_alive(false)
        .serve_connection(TokioIo::new(stream), service);
    tokio::select! {
        // Whoever is slower is not told.
        _ = timeout(SPARE_TIME, serving) => {}
        // Others ask while it says nothing.
        () = activity.asked_to_go() => {}
    }
    drop(member);
}

async fn stopped(stop: &mut watch::Receiver<bool>) {
    // An error means that the sender is gone, which is a stop as well.
    let _ = stop.wait_for(|&stop| stop).await;
}

/// As many connections as the system's limit of open files leaves room for, at most `wanted`. The limit is raised where that is needed
/// and allowed.
pub fn room_for(wanted: usize) -> usize {
    /// Files besides: the database's, those of link lists, connections to receivers of notices.
    #[cfg(unix)]
    const OTHERS: usize = 256;
    #[cfg(unix)]
    {
        use rustix::process::{Resource, Rlimit, getrlimit, setrlimit};
        let needed = (wanted + SPARE + OTHERS) as u64;
        let limit = getrlimit(Resource::Nofile);
        let (current, most) = (limit.current.unwrap_or(u64::MAX), limit.maximum.unwrap_or(u64::MAX));
        let mut allowed = current;
        if current < needed {
            let raised = Rlimit { current: Some(needed.min(most)), maximum: limit.maximum };
            if setrlimit(Resource::Nofile, raised).is_ok() {
                allowed = needed.min(most);
            }
        }
        let room = usize::try_from(allowed).unwrap_or(usize::MAX).saturating_sub(SPARE + OTHERS).max(1);
        if room < wanted {
            tracing::warn!(
                connections = room,
                open_files = allowed,
                "the limit of open files leaves room for fewer connections"
            );
        }
        room.min(wanted)
    }
    #[cfg(not(unix))]
    wanted
}

#[cfg(test)]
mod tests {
    use super::*;

    #[cfg(unix)]
    #[test]
    fn more_connections_than_open_files_are_not_promised() {
        assert_eq!(room_for(10), 10);
        let room = room_for(usize::MAX / 2);
        assert!((1..usize::MAX / 2).contains(&room), "{room}");
    }
}

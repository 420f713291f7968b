//! One call to another machine: its name looked up once, the addresses found checked, and the connection made to those.

use std::io::{ErrorKind, Read};
use std::net::SocketAddr;
use std::time::Duration;

use tokio::net::lookup_host;
use tokio::task::spawn_blocking;
use tokio::time::timeout;
use ureq::http::Uri;
use ureq::unversioned::resolver::{ResolvedSocketAddrs, Resolver};
use ureq::unversioned::transport::{DefaultConnector, NextTimeout};

use super::{Target, is_public};

/// Media type of an event (CloudEvents 1.0, JSON format and HTTP binding, structured mode).
const EVENT_TYPE: &str = "application/cloudevents+json; charset=utf-8";
const USER_AGENT: &str = concat!(env!("CARGO_PKG_NAME"), "/", env!("CARGO_PKG_VERSION"));
/// What is read of an answer's body before it is dropped.
const MOST_ANSWER_BYTES: u64 = 4_096;
/// Most addresses of one name that are tried; the client's own array holds no more.
const MOST_ADDRESSES: usize = 8;

/// What a call carries.
#[derive(Debug, Clone)]
pub struct Call {
    /// Header `webhook-id`.
    pub id: String,
    /// Header `webhook-timestamp`.
    pub timestamp: i64,
    /// Header `webhook-signature`.
    pub signature: String,
    /// The event.
    pub body: String,
}

/// Why a call was not answered well. The words repeat nothing that the other side said, nor where its name leads.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum Undelivered {
    /// The name leads nowhere.
    #[error("the name of its host cannot be looked up")]
    NoSuchHost,
    /// The name leads to an address that is not public.
    #[error(
        "the name of its host leads to an address that is not public; where that is meant, whoever runs the service lists the \
         address itself among notices.destinations"
    )]
    NotPublic,
    /// Nobody listens.
    #[error("no connection: {0}")]
    NoConnection(String),
    /// The encryption cannot be agreed on, or its certificate does not hold. What the other side showed is not repeated.
    #[error(
        "no secure connection: its certificate is not trusted, is of another name, or has expired, or it speaks no TLS"
    )]
    NotSecure,
    /// Too slow.
    #[error("no answer within {} s", .0.as_secs_f64())]
    TooSlow(Duration),
    /// It wants to send the call elsewhere.
    #[error("it answered {0}, a redirection, and none is followed; store the notice with the address that it leads to")]
    Redirected(u16),
    /// It refused.
    #[error("it answered {0}")]
    Refused(u16),
    /// A fault of ours.
    #[error("the call stopped short: {0}")]
    Broken(String),
}

/// Makes a call; an answer of 200 to 299 takes it. Both the look-up and the rest may take `patience`. No redirection is followed, no
/// proxy used.
///
/// An IP address is called as it is: that it may be is for the operator's list to say. All that a name leads to must be public.
///
/// # Errors
/// When it was not taken.
pub async fn deliver(target: Target, call: Call, patience: Duration) -> Result<(), Undelivered> {
    let addresses = addresses_of(&target, patience).await?;
    let made = spawn_blocking(move || post(&target, &call, addresses, patience)).await;
    made.unwrap_or_else(|error| Err(Undelivered::Broken(error.to_string())))
}

async fn addresses_of(target: &Target, patience: Duration) -> Result<Vec<SocketAddr>, Undelivered> {
    let (host, port) = target.host().ok_or(Undelivered::NoSuchHost)?;
    let name = match host {
        Ok(address) => return Ok(vec![SocketAddr::new(address, port)]),
        Err(name) => name,
    };
    let found = timeout(patience, lookup_host((name, port))).await.map_err(|_| Undelivered::TooSlow(patience))?;
    let found: Vec<SocketAddr> = found.map_err(|_| Undelivered::NoSuchHost)?.collect();
    // One private address among public ones would be reached when those fail.
    if found.iter().any(|address| !is_public(address.ip())) {
        return Err(Undelivered::NotPublic);
    }
    if found.is_empty() { Err(Undelivered::NoSuchHost) } else { Ok(found) }
}

fn post(target: &Target, call: &Call, addresses: Vec<SocketAddr>, patience: Duration) -> Result<(), Undelivered> {
    let settings = ureq::Agent::config_builder()
        .proxy(None)
        .max_redirects(0)
        .http_status_as_error(false)
        .user_agent(USER_AGENT)
        .timeout_global(Some(patience));
    let client = ureq::Agent::with_parts(settings.build(), DefaultConnector::new(), Pinned(addresses));
    let sent = client
        .post(target.as_str())
        .header("content-type", EVENT_TYPE)
        .header("webhook-id", &call.id)
        .header("webhook-timestamp", call.timestamp.to_string())
        .header("webhook-signature", &call.signature)
        .send(call.body.as_str());
    let mut answer = sent.map_err(|error| failure(&error, patience))?;
    // Its end does not matter: the head has said how the call was taken.
    let _ = answer.body_mut().as_reader().take(MOST_ANSWER_BYTES).read_to_end(&mut Vec::new());
    match answer.status().as_u16() {
        200..=299 => Ok(()),
        status @ 300..=399 => Err(Undelivered::Redirected(status)),
        status => Err(Undelivered::Refused(status)),
    }
}

fn failure(error: &ureq::Error, patience: Duration) -> Undelivered {
    match error {
        ureq::Error::Timeout(_) => Undelivered::TooSlow(patience),
        ureq::Error::Io(error) => match error.kind() {
            ErrorKind::ConnectionRefused => Undelivered::NoConnection("refused".to_owned()),
            ErrorKind::ConnectionReset | ErrorKind::BrokenPipe | ErrorKind::UnexpectedEof => {
                Undelivered::NoConnection("it broke off".to_owned())
            }
            ErrorKind::TimedOut => Undelivered::TooSlow(patience),
            // The errors of the encryption come wrapped into those of the connection.
            _ if error.get_ref().is_some() => Undelivered::NotSecure,
            kind => Undelivered::NoConnection(kind.to_string()),
        },
        ureq::Error::Rustls(_) | ureq::Error::Tls(_) => Undelivered::NotSecure,
        ureq::Error::Protocol(_) => Undelivered::NoConnection("the answer is not HTTP".to_owned()),
        other => Undelivered::NoConnection(other.to_string()),
    }
}

/// Answers every look-up with the addresses that were checked: a second look-up might find others.
#[derive(Debug)]
struct Pinned(Vec<SocketAddr>);

impl Resolver for Pinned {
    fn resolve(
        &self,
        _uri: &Uri,
        _config: &ureq::config::Config,
        _timeout: NextTimeout,
    ) -> Result<ResolvedSocketAddrs, ureq::Error> {
        let mut found = self.empty();
        self.0.iter().take(MOST_ADDRESSES).for_each(|&address| found.push(address));
        Ok(found)
    }
}

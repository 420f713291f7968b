//! Why a request is turned away, as a problem (RFC 9457) with the challenge of RFC 6750.

use std::time::Duration;

use axum::http::{HeaderValue, StatusCode, header};

use crate::api::problem::Problem;
use crate::service::{KeyFault, KeyScope};

/// Why a request is turned away.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Refusal {
    /// It brings no key.
    NoKey,
    /// What it brings is no key.
    Malformed,
    /// Its key opens nothing.
    Fault(KeyFault),
    /// Its key does not allow this.
    Scope(KeyScope),
    /// Its key is bound to other networks.
    Network,
    /// Its key is bound to networks, and this belongs to all or none.
    Bound,
    /// It was sent to a name that is not the machine's own.
    Host,
    /// A page of another origin had it sent.
    Origin,
    /// The minute's requests are used up.
    TooFast(Duration),
    /// The day's requests are used up.
    UsedUp(Duration),
}

impl Refusal {
    /// The problem: the table.
    pub fn into_problem(self) -> Problem {
        use StatusCode as S;
        const SEND: &str =
            "Send one in the header, as in Authorization: Bearer tailcast_…; whoever runs this service makes them.";
        let (status, code, detail, challenge) = match self {
            Self::NoKey => (S::UNAUTHORIZED, "key_required", format!("This takes an access key. {SEND}"), None),
            Self::Malformed => {
                let detail = format!("The header Authorization holds no access key, or there are several. {SEND}");
                (S::UNAUTHORIZED, "key_unknown", detail, Some("error=\"invalid_token\""))
            }
            Self::Fault(KeyFault::Unknown) => {
                let detail = format!("There is no such access key. {SEND}");
                (S::UNAUTHORIZED, "key_unknown", detail, Some("error=\"invalid_token\""))
            }
            Self::Fault(KeyFault::Revoked) => {
                let detail = "The access key was revoked; ask whoever runs this service for another one.".to_owned();
                (S::UNAUTHORIZED, "key_revoked", detail, Some("error=\"invalid_token\", error_description=\"revoked\""))
            }
            Self::Fault(KeyFault::Expired) => {
                let detail = "The access key's time is over; ask whoever runs this service for another one.".to_owned();
                (S::UNAUTHORIZED, "key_expired", detail, Some("error=\"invalid_token\", error_description=\"expired\""))
            }
            Self::Scope(needed) => {
                let detail = format!("This takes an access key of scope {}; yours allows less.", needed.as_str());
                (S::FORBIDDEN, "scope_too_narrow", detail, Some(scope_challenge(needed)))
            }
            Self::Network => {
                let detail = "The access key is bound to other networks; GET /v1/networks lists those of its networks that are kept."
                    .to_owned();
                (S::FORBIDDEN, "network_not_allowed", detail, Some("error=\"insufficient_scope\""))
            }
            Self::Bound => {
                let detail =
                    "The access key is bound to networks, and this belongs to all networks or to none. Ask under \
                              /v1/networks/{name}, or take a key that is not bound."
                        .to_owned();
                (S::FORBIDDEN, "beyond_networks", detail, Some("error=\"insufficient_scope\""))
            }
            Self::Host => {
                let detail = "The request was sent to a name that is not this machine's own, and no access keys are asked for here. \
                              Send it to 127.0.0.1 or localhost; or, where others reach the service by a name, have keys asked for \
                              (access.keys).";
                return Problem::new(S::FORBIDDEN, "host_not_allowed", detail);
            }
            Self::Origin => {
                let detail = "A web page of another origin sent this, and no access keys are asked for here. Whoever runs this service \
                              may list the page's origin in http.allowed_origins; a gateway in between passes Host on as it came.";
                return Problem::new(S::FORBIDDEN, "origin_not_allowed", detail);
            }
            Self::TooFast(wait) => {
                let detail =
                    "The access key's requests of this minute are used up; RateLimit says when there are more.";
                return Problem::new(S::TOO_MANY_REQUESTS, "too_many_requests", detail).retry_after(whole(wait));
            }
            Self::UsedUp(wait) => {
                let detail = "The access key's requests of this day (UTC) are used up.";
                return Problem::new(S::TOO_MANY_REQUESTS, "quota_used_up", detail).retry_after(whole(wait));
            }
        };
        let challenge =
            challenge.map_or("Bearer realm=\"tailcast\"".to_owned(), |why| format!("Bearer realm=\"tailcast\", {why}"));
        let problem = Problem::new(status, code, detail);
        match HeaderValue::from_str(&challenge) {
            Ok(challenge) => problem.with_header((header::WWW_AUTHENTICATE, challenge)),
            Err(_) => problem,
        }
    }
}

fn scope_challenge(needed: KeyScope) -> &'static str {
    match needed {
        KeyScope::Read => "error=\"insufficient_scope\", scope=\"read\"",
        KeyScope::Write => "error=\"insufficient_scope\", scope=\"write\"",
        KeyScope::Admin => "error=\"insufficient_scope\", scope=\"admin\"",
    }
}

/// Rounded up: who comes back then is not turned away again.
fn whole(wait: Duration) -> Duration {
    Duration::from_secs(wait.as_millis().div_ceil(1000).max(1) as u64)
}

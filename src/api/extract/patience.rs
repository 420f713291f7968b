//! The Prefer header (RFC 7240): how long a client waits for an answer.

use std::time::Duration;

use axum::extract::FromRequestParts;
use axum::http::request::Parts;

use crate::api::{ApiError, AppState};

/// How long a request waits for its job.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Patience {
    /// So long, at most as long as configured.
    pub wait: Duration,
    /// Whether the client prefers the job's address.
    pub at_once: bool,
}

impl Patience {
    /// What the preferences say; those that are none of ours, or are malformed, are passed over as RFC 7240 asks.
    fn of<'t>(preferences: impl Iterator<Item = &'t str>, longest: Duration) -> Self {
        let (mut at_once, mut wait) = (false, None);
        for preference in preferences {
            let (name, value) = preference.split_once('=').unwrap_or((preference, ""));
            match name.trim().to_ascii_lowercase().as_str() {
                "respond-async" => at_once = true,
                // The first of its kind counts (section 2).
                "wait" => wait = wait.or(value.trim().trim_matches('"').parse().ok().map(Duration::from_secs)),
                _ => {}
            }
        }
        let most = if at_once { Duration::ZERO } else { longest };
        Self { wait: wait.unwrap_or(most).min(longest), at_once }
    }
}

impl FromRequestParts<AppState> for Patience {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, state: &AppState) -> Result<Self, ApiError> {
        let values = parts.headers.get_all("prefer").iter().filter_map(|value| value.to_str().ok());
        Ok(Self::of(values.flat_map(|value| value.split([',', ';'])), state.jobs.wait()))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn preferences_are_read_as_rfc_7240_writes_them() {
        for (header, wait, at_once) in [
            ("", 10, false),
            ("respond-async", 0, true),
            ("Respond-Async, wait=3", 3, true),
            ("wait=3", 3, false),
            ("wait=\"3\"; foo=bar", 3, false),
            ("wait=99", 10, false),
            ("wait=soon, return=minimal", 10, false),
            ("wait=2, wait=5", 2, false),
        ] {
            let patience = Patience::of(header.split([',', ';']), Duration::from_secs(10));
            assert_eq!(patience, Patience { wait: Duration::from_secs(wait), at_once }, "{header}");
        }
    }
}

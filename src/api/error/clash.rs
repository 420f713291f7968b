//! What stored evidence a write does not fit, in words.

use std::time::Duration;

use axum::http::StatusCode;

use crate::api::problem::Problem;
use crate::service::{Clash, date_text, kind_name};

/// After how long to try again when the queue of jobs is full.
const JOBS_RETRY: Duration = Duration::from_secs(60);

/// The problem that a clash is answered with.
pub fn clash_problem(clash: Clash) -> Problem {
    let (code, detail) = match clash {
        Clash::DegreeKind { stored } => {
            let stored = kind_name(stored);
            let detail = format!(
                "degree_kind is \"{stored}\" and says what the stored counts count; delete the network's snapshots, \
                 transitions and link events before it becomes another."
            );
            ("degree_kind_fixed", detail)
        }
        Clash::Counts { date, table: (from, to), nodes: (table, snapshot) } => {
            let [date, from, to] = [date, from, to].map(date_text);
            let detail = format!(
                "The transitions from {from} to {to} have other degree counts at {date} than the snapshot of that date \
                 ({table} nodes, where the snapshot has {snapshot}). Make both from the same nodes, or delete the stored \
                 one first."
            );
            ("counts_differ", detail)
        }
        Clash::Seam { date, stored: (from, to) } => {
            let [date, from, to] = [date, from, to].map(date_text);
            let detail = format!(
                "The stored transitions from {from} to {to} have other degree counts at {date} than these. Make both from \
                 the same nodes, or delete the stored ones first."
            );
            ("counts_differ", detail)
        }
        Clash::Overlap { stored: (from, to) } => {
            let [from, to] = [from, to].map(date_text);
            let detail = format!(
                "Transitions from {from} to {to} are stored already, and periods must not overlap. Delete those first, or \
                 choose dates outside."
            );
            ("transitions_overlap", detail)
        }
        Clash::TooMany { what, most } => {
            let detail =
                format!("The network has {most} {what} already, as many as one run takes. Delete old ones first.");
            ("network_full", detail)
        }
        Clash::JobLive { job } => {
            let detail = format!(
                "The network has a job of this kind that has not ended. Wait for /v1/jobs/{job}, or DELETE it, then ask again."
            );
            ("job_live", detail)
        }
        Clash::TooManyJobs => {
            return Problem::new(
                StatusCode::SERVICE_UNAVAILABLE,
                "overloaded",
                "As many jobs as this service takes are waiting; try again when one has ended.",
            )
            .retry_after(JOBS_RETRY);
        }
        Clash::TooManyRows { total, most } => {
            let detail = format!(
                "The network would have {total} rows of evidence, more than the {most} that are kept of one. Delete old \
                 snapshots or transitions first, or raise limits.network_rows."
            );
            ("network_full", detail)
        }
    };
    Problem::new(StatusCode::CONFLICT, code, detail)
}

//! Why a job failed, as the request that made it is answered.

use std::time::Duration;

use axum::http::StatusCode;

use crate::api::decode::{Fault, Faults, Place};
use crate::api::problem::Problem;
use crate::service::{JobFailure, JobFault, JobProblem};

/// After how long to try again what the process did not live through.
const RETRY: Duration = Duration::from_secs(60);

/// The problem that a failed job is answered with.
pub fn job_problem(problem: JobProblem) -> Problem {
    use StatusCode as S;
    let mut faults = Faults::default();
    for JobFault { line, parameter, detail } in problem.errors {
        let place = match (line, parameter) {
            (Some(line), _) => Place::Line(line),
            (None, Some(name)) => Place::Query(name),
            (None, None) => Place::Body(String::new()),
        };
        faults.push(Fault { place, detail });
    }
    let told = |status, code| Problem::new(status, code, problem.detail).with_faults(faults);
    match problem.code {
        JobFailure::InvalidRequest => told(S::BAD_REQUEST, "invalid_request"),
        JobFailure::BodyTooLarge => told(S::PAYLOAD_TOO_LARGE, "body_too_large"),
        JobFailure::DegreeKindFixed => told(S::CONFLICT, "degree_kind_fixed"),
        JobFailure::NetworkFull => told(S::CONFLICT, "network_full"),
        JobFailure::NoSnapshot => told(S::UNPROCESSABLE_ENTITY, "no_snapshot"),
        JobFailure::ArrivalsRequired => told(S::UNPROCESSABLE_ENTITY, "arrivals_required"),
        JobFailure::NotIdentified => told(S::UNPROCESSABLE_ENTITY, "not_identified"),
        JobFailure::Impossible => told(S::UNPROCESSABLE_ENTITY, "impossible"),
        JobFailure::NotConverged => told(S::UNPROCESSABLE_ENTITY, "not_converged"),
        JobFailure::TooSlow => told(S::SERVICE_UNAVAILABLE, "too_slow").retry_after(RETRY),
        JobFailure::ListMissing => told(S::SERVICE_UNAVAILABLE, "list_missing").retry_after(RETRY),
        JobFailure::Interrupted => told(S::SERVICE_UNAVAILABLE, "interrupted").retry_after(RETRY),
        JobFailure::Internal => told(S::INTERNAL_SERVER_ERROR, "internal"),
    }
}

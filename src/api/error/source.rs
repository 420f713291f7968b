//! Sources that are not kept, and runs that failed.

use axum::http::StatusCode;

use crate::api::decode::{At, Faults};
use crate::api::problem::Problem;
use crate::report::readable;
use crate::service::ServiceError;

/// A source that would not be run, or whose run failed.
pub fn source_refused(why: &ServiceError) -> Problem {
    let words = readable(&why.to_string());
    let (code, field, fault, detail) = match why {
        ServiceError::SourcesOff => {
            let remedy = "Ask them to list the database, or PUT snapshots that you count yourself";
            ("sources_off", "database", why.to_string(), format!("{words}. {remedy}."))
        }
        ServiceError::NoDatabase { known } => {
            let fault = format!("the databases of this service are {}", known.join(", "));
            let remedy = "Name one that is, or ask them to list this one";
            ("database_not_listed", "database", fault, format!("{words}. {remedy}."))
        }
        ServiceError::SourceBounds { field, detail } => {
            let detail = format!("The source is beyond what this service allows: {detail}.");
            ("source_out_of_bounds", *field, why.to_string(), detail)
        }
        _ => {
            let detail = format!("The source was run and no snapshot was stored: {why}.");
            return Problem::new(StatusCode::UNPROCESSABLE_ENTITY, "source_failed", detail);
        }
    };
    let mut faults = Faults::default();
    faults.add(&At::ROOT.field(field), fault);
    Problem::new(StatusCode::UNPROCESSABLE_ENTITY, code, detail).with_faults(faults)
}

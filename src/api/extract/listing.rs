//! What a list is asked for.

use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use uuid::Uuid;

use super::parameters;
use crate::api::decode::{Fault, Faults, Place};
use crate::api::pages::{NO_CURSOR, limit};
use crate::api::{ApiError, AppState};
use crate::service::RunFilter;

const KNOWN: [&str; 4] = ["network", "label", "limit", "cursor"];

/// The query of a list of runs.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Listing {
    /// Which runs.
    pub filter: RunFilter,
    /// The query without its cursor, to build the next page's address from.
    pub repeated: Vec<(&'static str, String)>,
}

impl FromRequestParts<AppState> for Listing {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let mut filter = RunFilter { limit: limit(None).unwrap_or(1), ..RunFilter::default() };
        let mut repeated = Vec::new();
        for (name, value) in parameters(&parts.uri, &KNOWN, &mut faults) {
            let Some(known) = KNOWN.into_iter().find(|&known| known == name) else { continue };
            let mut fault = |detail: &str| {
                faults.push(Fault { place: Place::Query(name.clone()), detail: detail.to_owned() });
            };
            if value.contains('\0') {
                fault("holds a NUL character");
            }
            match known {
                "network" => filter.network = Some(value.clone()),
                "label" => filter.label = Some(value.clone()),
                "limit" => match limit(Some(&value)) {
                    Ok(limit) => filter.limit = limit,
                    Err(detail) => fault(&detail),
                },
                _ => match Uuid::try_parse(&value) {
                    Ok(id) => filter.before = Some(id),
                    Err(_) => fault(NO_CURSOR),
                },
            }
            if known != "cursor" {
                repeated.push((known, value));
            }
        }
        if faults.is_empty() { Ok(Self { filter, repeated }) } else { Err(ApiError::Invalid(faults)) }
    }
}

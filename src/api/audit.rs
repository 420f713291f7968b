//! `/v1/audit`: the trail of writes.

use axum::extract::{FromRequestParts, State};
use axum::http::request::Parts;
use axum::response::Response;
use jiff::Timestamp;
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;
use uuid::Uuid;

use super::decode::{Fault, Faults, Place, instant_of};
use super::extract::parameters;
use super::pages::{self, NO_CURSOR, escaped};
use super::refusals::Refusals;
use super::{ApiError, AppState};
use crate::service::{AuditFilter, AuditLine};

const PATH: &str = "/v1/audit";
const KNOWN: [&str; 6] = ["key", "network", "since", "until", "limit", "cursor"];

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_audit))
}

/// A write that was done.
#[derive(Debug, Clone, Serialize, ToSchema)]
struct AuditLineAnswer {
    /// Id of the line.
    id: Uuid,
    /// When it was written, RFC 3339.
    #[schema(format = DateTime)]
    written_at: String,
    /// The access key; null where none was asked for.
    key: Option<AuditKeyAnswer>,
    /// The method.
    #[schema(examples("PUT"))]
    method: String,
    /// Template of the path.
    #[schema(examples("/v1/networks/{name}/snapshots/{as_of}"))]
    route: String,
    /// The path.
    #[schema(examples("/v1/networks/heronsgate/snapshots/2026-06-01"))]
    path: String,
    /// The network it was about; null where it was about none.
    network: Option<String>,
    /// Id of the run or job that was made; null where none was.
    made: Option<String>,
    /// Id of the request, as in X-Request-Id and in the log.
    request_id: Option<String>,
}

/// An access key as it was.
#[derive(Debug, Clone, Serialize, ToSchema)]
struct AuditKeyAnswer {
    /// The part of it that is not secret.
    #[schema(examples("4f0c9a61d2e7b835"))]
    id: String,
    /// Its name.
    name: String,
}

/// Writes, newest first; the Link header leads to the next page.
#[derive(Debug, Clone, Serialize, ToSchema)]
struct AuditPage {
    /// The writes.
    items: Vec<AuditLineAnswer>,
}

/// List writes
///
/// Every write that was acknowledged since the trail began or was cut, newest first: a line is stored with what it tells of, or neither
/// is. What the service does by itself (refreshes, jobs once they are taken on) has none. Lines are kept for `access.audit_days`.
#[utoipa::path(
    get,
    path = "/v1/audit",
    tag = "operation",
    params(
        ("key" = Option<String>, Query, description = "Only by the access key with this id"),
        ("network" = Option<String>, Query, description = "Only about this network"),
        ("since" = Option<String>, Query, description = "Only from this time on: RFC 3339, or a bare date for 00:00 UTC"),
        ("until" = Option<String>, Query, description = "Only before this time"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<Uuid>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of writes", body = AuditPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        Refusals,
    )
)]
async fn list_audit(State(state): State<AppState>, asked: AuditListing) -> Result<Response, ApiError> {
    let (found, more) = state.service.audit(asked.filter).await?;
    let next = found.last().filter(|_| more).map(|last| format!("{PATH}?cursor={}{}", last.id, asked.repeated));
    pages::page(AuditPage { items: found.into_iter().map(AuditLineAnswer::from).collect() }, next)
}

/// The query of the list.
struct AuditListing {
    filter: AuditFilter,
    /// The query without its cursor.
    repeated: String,
}

impl FromRequestParts<AppState> for AuditListing {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let mut filter = AuditFilter { limit: pages::limit(None).unwrap_or(1), ..AuditFilter::default() };
        let mut repeated = String::new();
        for (name, value) in parameters(&parts.uri, &KNOWN, &mut faults) {
            let read = read(&mut filter, &name, &value);
            if let Err(detail) = read {
                faults.push(Fault { place: Place::Query(name.clone()), detail });
            }
            if name != "cursor" {
                repeated.push_str(&format!("&{name}={}", escaped(&value)));
            }
        }
        if faults.is_empty() { Ok(Self { filter, repeated }) } else { Err(ApiError::Invalid(faults)) }
    }
}

fn read(filter: &mut AuditFilter, name: &str, value: &str) -> Result<(), String> {
    if value.contains('\0') {
        return Err("holds a NUL character".to_owned());
    }
    let time = |text| -> Result<Option<Timestamp>, String> { instant_of(text).map(Some) };
    match name {
        "key" => filter.key = Some(value.to_owned()),
        "network" => filter.network = Some(value.to_owned()),
        "since" => filter.since = time(value)?,
        "until" => filter.until = time(value)?,
        "limit" => filter.limit = pages::limit(Some(value))?,
        "cursor" => filter.before = Some(Uuid::try_parse(value).map_err(|_| NO_CURSOR.to_owned())?),
        _ => {}
    }
    Ok(())
}

impl From<AuditLine> for AuditLineAnswer {
    fn from(line: AuditLine) -> Self {
        Self {
            id: line.id,
            written_at: line.written_at.to_string(),
            key: line.key.map(|(id, name)| AuditKeyAnswer { id, name }),
            method: line.method,
            route: line.route,
            path: line.path,
            network: line.network,
            made: line.made,
            request_id: line.request_id,
        }
    }
}

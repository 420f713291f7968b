//! Answers about kept runs: their forms, lists.

use axum::http::{HeaderMap, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use serde::de::DeserializeOwned;
use utoipa::ToSchema;
use uuid::Uuid;

use super::extract::{Listing, ResultFormat};
use super::representation::{self, Content, Validator, header_value};
use super::{ApiError, pages};
use crate::service::{RunSummary, StoredRun};

/// A run's line in a list.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct RunLine {
    /// Id of the run.
    id: Uuid,
    /// When it was answered, RFC 3339.
    #[schema(format = DateTime)]
    created_at: String,
    /// The caller's name for it.
    label: Option<String>,
    /// Tracked network it belongs to; null for a run from inline counts.
    network: Option<String>,
    /// Engine and version that computed it.
    engine: String,
    /// Seed of everything random in it, so far the samples behind the goodness of fit.
    seed: u64,
    /// Digest of the validated inputs.
    inputs_digest: String,
    /// Whether a refresh of its network issued it: only such forecasts are accounted for.
    issued: bool,
    /// When counts it stands on were last replaced or deleted; null when they stand. The run itself stays as it was made.
    #[schema(format = DateTime)]
    evidence_corrected_at: Option<String>,
}

/// Runs, newest first; the Link header leads to the next page.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
pub struct RunPage {
    /// The runs.
    items: Vec<RunLine>,
}

impl From<RunSummary> for RunLine {
    fn from(run: RunSummary) -> Self {
        Self {
            id: run.id,
            created_at: run.created_at.to_string(),
            label: run.label,
            network: run.network,
            engine: run.engine,
            seed: run.seed,
            inputs_digest: run.inputs_digest,
            issued: run.issued,
            evidence_corrected_at: run.evidence_corrected_at.map(|time| time.to_string()),
        }
    }
}

/// The form that a kind of run is answered in.
pub trait RunForm: Clone + Send + 'static {
    /// The form.
    fn format(&self) -> ResultFormat;

    /// The run's validator in this form, but for what [`representation::entity_tag`] adds.
    fn tag(&self, tag: &str) -> String;

    /// A kept run in this form.
    ///
    /// # Errors
    /// When the run has nothing of what is to be shown, or its document is none that was kept.
    fn content(&self, run: &StoredRun) -> Result<Content, ApiError>;
}

/// A document as it was kept.
///
/// # Errors
/// When it is none of these.
pub fn read<T: DeserializeOwned>(document: &str) -> Result<T, ApiError> {
    serde_json::from_str(document).map_err(|error| ApiError::Broken(format!("a document that was kept: {error}")))
}

/// 201 with the run and where it is kept.
pub async fn created(path: &str, run: StoredRun, form: impl RunForm) -> Result<Response, ApiError> {
    let place = format!("{path}/{}", run.id);
    let location = header_value(&place)?;
    let (tag, modified, format) = (form.tag(&run.tag), Some(run.created_at), form.format());
    let content = representation::drawn(format == ResultFormat::Json, move || form.content(&run)).await;
    let content = content.map_err(|error| error.of_kept(place))?;
    let represented = representation::represented(Validator { tag: &tag, modified }, format, content)?;
    let mut response = (StatusCode::CREATED, represented).into_response();
    response.headers_mut().insert(header::LOCATION, location);
    Ok(response)
}

/// 200 with the run, or 304 when the client has it already.
pub async fn found(run: StoredRun, form: impl RunForm, asked: &HeaderMap) -> Result<Response, ApiError> {
    // A run never changes.
    let (tag, modified, format) = (form.tag(&run.tag), Some(run.created_at), form.format());
    let (validator, light) = (Validator { tag: &tag, modified }, format == ResultFormat::Json);
    representation::found_drawn(validator, format, asked, light, move || form.content(&run)).await
}

/// A page of runs with a Link to the next one.
pub fn page(path: &str, listing: &Listing, runs: Vec<RunSummary>, more: bool) -> Result<Response, ApiError> {
    let next = runs.last().filter(|_| more).map(|last| next_page(path, listing, last.id));
    pages::page(RunPage { items: runs.into_iter().map(RunLine::from).collect() }, next)
}

fn next_page(path: &str, listing: &Listing, last: Uuid) -> String {
    let mut address = format!("{path}?cursor={last}");
    for (name, value) in &listing.repeated {
        address.push_str(&format!("&{name}={}", pages::escaped(value)));
    }
    address
}

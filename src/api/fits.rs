//! `/v1/fits`

use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::Response;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::access::Sight;
use super::extract::{FitForm, FitFormQuery, IdempotencyKey, JsonBody, Listing, ResultFormat, run_id};
use super::problem::Problem;
use super::representation::{Conditions, Content};
use super::requests::{FitRequestBody, read_fit};
use super::runs::{self, RunForm, RunPage};
use super::{ApiError, AppState, examples};
use crate::report;
use crate::service::{FitRun, RunFilter, RunKind, StoredRun};

/// Where these runs are kept.
pub const PATH: &str = "/v1/fits";

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(list_fits, create_fit)).routes(routes!(get_fit, delete_fit))
}

/// Fit the attachment mix
///
/// Fits the degree counts without forecasting from them, keeps the run, answers with it and its diagnostics.
#[utoipa::path(
    post,
    path = "/v1/fits",
    tag = "fits",
    params(
        FitFormQuery,
        ("Idempotency-Key" = Option<String>, Header,
            min_length = 1, max_length = 255,
            description = "Requests with the same key and body are one and the same: the run is made once. Bodies are \
                           the same when their bytes are. Deleting the run frees its key."),
    ),
    request_body(content = FitRequestBody, content_type = "application/json", example = examples::fit_request),
    responses(
        (status = 201, description = "The run, kept", headers(
            ("Location" = String, description = "Where the run is kept"),
            ("ETag" = String, description = "Strong validator of this form of the run"),
            ("Last-Modified" = String, description = "When the run was made"),
        ), content(
            (FitRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 400, description = "Not JSON, or parts of it are wrong", body = Problem,
            content_type = "application/problem+json"),
        (status = 406, description = "No acceptable form", body = Problem, content_type = "application/problem+json"),
        (status = 408, description = "The body came too slowly", body = Problem, content_type = "application/problem+json"),
        (status = 409, description = "The key came before with another body", body = Problem,
            content_type = "application/problem+json"),
        (status = 413, description = "The body is too large", body = Problem, content_type = "application/problem+json"),
        (status = 415, description = "The body is not announced as JSON, or is compressed", body = Problem,
            content_type = "application/problem+json"),
        (status = 422, description = "Well formed, but no fit follows from it, or none of what the chart shows; the detail says what \
            would help",
            body = Problem, content_type = "application/problem+json"),
        (status = 500, description = "A fault of ours", body = Problem, content_type = "application/problem+json"),
        (status = 503, description = "Too busy or too slow; Retry-After says when to try again", body = Problem,
            content_type = "application/problem+json"),
    )
)]
async fn create_fit(
    State(state): State<AppState>,
    form: FitForm,
    key: IdempotencyKey,
    body: JsonBody,
) -> Result<Response, ApiError> {
    let claim = key.claim(&body);
    let limits = state.limits;
    let inputs = body.read(move |raw, faults| read_fit(raw, &limits, faults)).await?;
    let run = state.service.create(inputs, None, claim).await?;
    runs::created(PATH, run, form).await
}

/// Read a fit
///
/// The run, byte for byte as it was first answered.
#[utoipa::path(
    get,
    path = "/v1/fits/{id}",
    tag = "fits",
    params(
        ("id" = String, Path, description = "Id of the run"),
        FitFormQuery,
        ("If-None-Match" = Option<String>, Header, description = "Answer 304 when the run still has this ETag"),
    ),
    responses(
        (status = 200, description = "The run", headers(
            ("ETag" = String, description = "Strong validator of this form of the run"),
            ("Last-Modified" = String, description = "When the run was made"),
            ("Cache-Control" = String, description = "private, no-cache: keep it, but ask before each use"),
        ), content(
            (FitRun = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 304, description = "The client has it already"),
        (status = 400, description = "A parameter is wrong", body = Problem, content_type = "application/problem+json"),
        (status = 404, description = "No such run", body = Problem, content_type = "application/problem+json"),
        (status = 406, description = "No acceptable form", body = Problem, content_type = "application/problem+json"),
        (status = 422, description = "The run has nothing of what the chart shows; the detail says what would help", body = Problem,
            content_type = "application/problem+json"),
        (status = 500, description = "A fault of ours", body = Problem, content_type = "application/problem+json"),
        (status = 503, description = "Too busy", body = Problem, content_type = "application/problem+json"),
    )
)]
async fn get_fit(
    State(state): State<AppState>,
    Path(id): Path<String>,
    form: FitForm,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    let run = state.service.run(RunKind::Fit, run_id(&id)?).await?;
    runs::found(run, form, &headers).await
}

/// List fits
///
/// Newest first; the Link header leads to the next page.
#[utoipa::path(
    get,
    path = "/v1/fits",
    tag = "fits",
    params(
        ("network" = Option<String>, Query, description = "Only runs of this tracked network"),
        ("label" = Option<String>, Query, description = "Only runs with this label"),
        ("limit" = Option<u32>, Query, description = "At most this many, up to 200; 50 when left out", minimum = 1, maximum = 200),
        ("cursor" = Option<Uuid>, Query, description = "Where to go on, from the Link of the page before"),
    ),
    responses(
        (status = 200, description = "A page of runs", body = RunPage, headers(
            ("Link" = String, description = "Address of the next page, rel=\"next\"; absent on the last page"),
        )),
        (status = 400, description = "A parameter is wrong", body = Problem, content_type = "application/problem+json"),
        (status = 500, description = "A fault of ours", body = Problem, content_type = "application/problem+json"),
        (status = 503, description = "Too busy", body = Problem, content_type = "application/problem+json"),
    )
)]
async fn list_fits(State(state): State<AppState>, sight: Sight, listing: Listing) -> Result<Response, ApiError> {
    let (found, more) =
        state.service.list(RunKind::Fit, RunFilter { seen_by: sight.0, ..listing.filter.clone() }).await?;
    runs::page(PATH, &listing, found, more)
}

/// Delete a fit
///
/// The run goes, and with it the idempotency keys that led to it.
#[utoipa::path(
    delete,
    path = "/v1/fits/{id}",
    tag = "fits",
    params(
        ("id" = String, Path, description = "Id of the run"),
        ("If-Match" = Option<String>, Header, description = "Delete only when the run has this ETag"),
    ),
    responses(
        (status = 204, description = "It is gone"),
        (status = 404, description = "No such run", body = Problem, content_type = "application/problem+json"),
        (status = 412, description = "The run has another ETag", body = Problem, content_type = "application/problem+json"),
        (status = 500, description = "A fault of ours", body = Problem, content_type = "application/problem+json"),
        (status = 503, description = "Too busy", body = Problem, content_type = "application/problem+json"),
    )
)]
async fn delete_fit(
    State(state): State<AppState>,
    Path(id): Path<String>,
    conditions: Conditions,
) -> Result<StatusCode, ApiError> {
    let matches = move |tag: &str| conditions.hold(Some(tag));
    state.service.delete(RunKind::Fit, run_id(&id)?, matches).await?;
    Ok(StatusCode::NO_CONTENT)
}

impl RunForm for FitForm {
    fn format(&self) -> ResultFormat {
        Self::format(self)
    }

    fn tag(&self, tag: &str) -> String {
        Self::tag(self, tag)
    }

    fn content(&self, run: &StoredRun) -> Result<Content, ApiError> {
        let document = &run.document;
        let read = || -> Result<FitRun, ApiError> { runs::read(document) };
        Ok(match self {
            Self::Json => Content::json(document.clone()),
            Self::Csv => Content::csv(report::fit_csv(&read()?.answer))?,
            Self::Svg(chart, theme) => Content::markup(report::fit_chart(&read()?.answer, *chart, *theme)?.svg),
            Self::Html(form) => {
                let again = format!("{}{PATH}/{}", form.service, run.id);
                Content::markup(report::fit_page(&read()?, &again, form.theme)?)
            }
        })
    }
}

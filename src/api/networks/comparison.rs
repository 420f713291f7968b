//! `/v1/networks/{name}/comparison`

use axum::extract::{FromRequestParts, Path, State};
use axum::http::request::Parts;
use axum::http::{HeaderValue, header};
use axum::response::Response;
use serde::Serialize;
use utoipa::ToSchema;
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

use super::json_body;
use crate::api::decode::Faults;
use crate::api::extract::{ComparisonForm, ComparisonFormQuery, ResultFormat, network_name, parameters};
use crate::api::pages::escaped;
use crate::api::refusals::{FormRefusals, Refusals};
use crate::api::representation::{self, Content};
use crate::api::requests::ComparisonQuery;
use crate::api::{ApiError, AppState, Problem};
use crate::report::{self, ForecastChart, ForecastPart};
use crate::service::{
    DateAnswer, ForecastAnswer, LimitAnswer, NetworkEvidence, ScenarioAnswer, WarningAnswer, date_text,
};

/// The routes of this resource.
pub fn routes() -> OpenApiRouter<AppState> {
    OpenApiRouter::new().routes(routes!(get_comparison))
}

/// Kept scenarios set beside the forecast as it stands.
#[derive(Debug, Clone, Serialize, ToSchema)]
pub struct ComparisonAnswer {
    /// The network.
    network: String,
    /// The newest snapshot, which everything is counted from.
    as_of: String,
    /// Engine and version that computed it.
    engine: String,
    /// Seed of everything random in it.
    seed: u64,
    /// Digest of the validated inputs. The same digest, seed and engine give the same answer.
    inputs_digest: String,
    /// The forecast as it stands, one entry a date.
    forecast: Vec<DateAnswer>,
    /// The network's limits as it stands.
    limits: Vec<LimitAnswer>,
    /// The scenarios, in the order asked, each with the network's limits under it.
    scenarios: Vec<ScenarioAnswer>,
    /// What was seen in these inputs that the reader must know before acting.
    warnings: Vec<WarningAnswer>,
    /// What holds for every forecast.
    cautions: Vec<String>,
}

/// The query of a comparison and the form of its answer.
#[derive(Debug, Clone)]
struct Asked {
    query: ComparisonQuery,
    form: ComparisonForm,
    /// The address that was asked, without what is said of the form.
    address: String,
}

impl FromRequestParts<AppState> for Asked {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let known = [&["scenarios", "thresholds", "until", "every"][..], &ComparisonForm::KNOWN].concat();
        let given = parameters(&parts.uri, &known, &mut faults);
        let query = ComparisonQuery::read(&given, &mut faults);
        let form = ComparisonForm::of(&given, &parts.headers, faults)?;
        let asked = given.iter().filter(|(name, _)| !ComparisonForm::KNOWN.contains(&name.as_str()));
        let asked: Vec<String> = asked.map(|(name, value)| format!("{name}={}", escaped(value))).collect();
        let separator = if asked.is_empty() { "" } else { "?" };
        Ok(Self { query, form, address: format!("{}{separator}{}", parts.uri.path(), asked.join("&")) })
    }
}

/// Compare scenarios
///
/// Kept scenarios set beside the forecast as it stands, from all that is stored of the network, for the thresholds and dates of its
/// plan or of the query; the network's limits are answered under each. Differences are paired: both are looked at in the same world.
/// Computed on each call, and not kept.
#[utoipa::path(
    get,
    path = "/v1/networks/{name}/comparison",
    tag = "networks",
    params(
        ("name" = String, Path, description = "The network"),
        ("scenarios" = Option<String>, Query, description = "Names of scenarios with commas between; all when left out"),
        ("thresholds" = Option<String>, Query, description = "Thresholds with commas between; those of the plan when left out"),
        ("until" = Option<String>, Query, description = "The date to compare at, or with `every` the last of several; the plan's \
            dates when left out"),
        ("every" = Option<String>, Query, description = "The step of dates up to `until`, an ISO 8601 duration"),
        ComparisonFormQuery,
    ),
    responses(
        (status = 200, description = "The comparison; as CSV one row a scenario, date and threshold", content(
            (ComparisonAnswer = "application/json"),
            (String = "text/csv"),
            (String = "image/svg+xml"),
            (String = "text/html"),
        )),
        (status = 422, description = "There is no scenario, no snapshot, neither a plan nor thresholds and until, or no forecast \
            follows; the detail says what would help", body = Problem, content_type = "application/problem+json"),
        Refusals, FormRefusals,
    )
)]
async fn get_comparison(
    State(state): State<AppState>,
    Path(name): Path<String>,
    Asked { query, form, address }: Asked,
) -> Result<Response, ApiError> {
    let (name, mut faults) = (network_name(&name)?, Faults::default());
    let NetworkEvidence { evidence, plan, limits, scenarios, place: _place, .. } =
        state.service.evidence(&name).await?;
    let as_of = date_text(evidence.latest().as_of);
    let inputs = query.inputs(evidence, plan.as_ref(), (limits, scenarios), &state.limits, &mut faults)?;
    let inputs = inputs.ok_or(ApiError::Invalid(faults))?;
    let answer = state.service.answer(inputs).await?;
    let format = form.format();
    let draw = move || draw(answer, &form, (name.as_str(), as_of), &address);
    respond(format, representation::drawn(format == ResultFormat::Json, draw).await?)
}

fn draw(
    answer: ForecastAnswer,
    form: &ComparisonForm,
    (network, as_of): (&str, String),
    address: &str,
) -> Result<Content, ApiError> {
    Ok(match form {
        ComparisonForm::Json => json_body(&ComparisonAnswer::new(network, as_of, answer))?.into(),
        ComparisonForm::Csv => Content::csv(report::part_csv(&answer, ForecastPart::Scenarios))?,
        ComparisonForm::Svg(threshold, theme) => {
            Content::markup(report::forecast_chart(&answer, ForecastChart::Scenarios, *threshold, *theme)?.svg)
        }
        ComparisonForm::Html(form) => {
            let again = format!("{}{address}", form.service);
            Content::markup(report::comparison_page(&answer, (network, &as_of), &again, form.theme)?)
        }
    })
}

/// A comparison has no validator: to have one it would have to be computed.
fn respond(format: ResultFormat, content: Content) -> Result<Response, ApiError> {
    let mut response = content.into_response(format)?;
    let headers = response.headers_mut();
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("no-store"));
    headers.insert(header::VARY, HeaderValue::from_static("accept"));
    Ok(response)
}

impl ComparisonAnswer {
    fn new(network: &str, as_of: String, answer: ForecastAnswer) -> Self {
        Self {
            network: network.to_owned(),
            as_of,
            engine: answer.engine,
            seed: answer.seed,
            inputs_digest: answer.inputs_digest,
            forecast: answer.forecast,
            limits: answer.limits,
            scenarios: answer.scenarios,
            warnings: answer.warnings,
            cautions: answer.cautions,
        }
    }
}

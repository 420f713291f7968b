//! Bodies of requests about tracked networks, as they are documented.

use std::borrow::Cow;

use serde::Serialize;
use utoipa::openapi::{RefOr, Schema};
use utoipa::{PartialSchema, ToSchema};

use super::network::EVIDENCE_FIELDS;
use super::schema::{
    ArrivalsBody, DegreeKindName, FitRequestBody, ForecastRequestBody, HorizonBody, degree_pairs, levels, move_rows,
    share_pairs, thresholds,
};

/// A tracked network's settings. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct NetworkBody {
    /// What a degree counts. It cannot change while anything is stored of the network.
    pub degree_kind: DegreeKindName,
    /// Words for people, at most 2000 characters.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_length = 2000)]
    pub description: Option<String>,
    /// `[degree, share]` pairs: the degrees newcomers arrive with; the shares add up to 1. Read from the data when left
    /// out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = share_pairs)]
    pub entry_degrees: Option<Vec<(u64, f64)>>,
    /// What is asked of its forecasts, which are then made anew whenever what is stored changes.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub forecast_plan: Option<ForecastPlanBody>,
}

/// What is asked of every forecast of a tracked network. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ForecastPlanBody {
    /// A hub is a node with at least this many links; one answer for each.
    #[schema(schema_with = thresholds)]
    pub thresholds: Vec<u64>,
    /// Dates, counted from the newest snapshot on.
    pub horizon: HorizonBody,
    /// Levels of the intervals, each above 0 and at most 0.9999; 0.5 and 0.9 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = levels, required = false)]
    pub levels: Option<Vec<f64>>,
    /// New nodes; estimated from the snapshots when left out, which takes two of them.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub arrivals: Option<ArrivalsBody>,
}

/// The degree counts of a snapshot.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct DegreeCountsBody {
    /// `[degree, nodes]` pairs in any order, no degree twice: so many nodes have exactly so many links.
    #[schema(schema_with = degree_pairs)]
    pub degree_counts: Vec<(u64, u64)>,
}

/// The rows of a table of transitions.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct TransitionCountsBody {
    /// `[degree before, degree after, nodes]` rows; null before: arrived since, null after: departed.
    #[schema(schema_with = move_rows)]
    pub counts: Vec<(Option<u64>, Option<u64>, u64)>,
}

/// What is asked of a forecast of a tracked network: an inline request without what is known of the network.
pub struct NetworkForecastBody;

/// What is asked of a fit to a tracked network: an inline request without what is known of the network.
pub struct NetworkFitBody;

impl PartialSchema for NetworkForecastBody {
    fn schema() -> RefOr<Schema> {
        let says = "What is asked of a forecast of a tracked network. Unknown fields are refused. What is left out comes from \
                    the network's `forecast_plan`; without one, `thresholds` and either `dates` or `horizon` are needed.";
        match without_evidence(ForecastRequestBody::schema(), says) {
            RefOr::T(Schema::Object(mut body)) => {
                body.required.retain(|name| name != "thresholds");
                RefOr::T(Schema::Object(body))
            }
            other => other,
        }
    }
}

impl PartialSchema for NetworkFitBody {
    fn schema() -> RefOr<Schema> {
        without_evidence(
            FitRequestBody::schema(),
            "What is asked of a fit to a tracked network. Unknown fields are refused.",
        )
    }
}

impl ToSchema for NetworkForecastBody {
    fn name() -> Cow<'static, str> {
        "NetworkForecastBody".into()
    }

    fn schemas(schemas: &mut Vec<(String, RefOr<Schema>)>) {
        ForecastRequestBody::schemas(schemas);
    }
}

impl ToSchema for NetworkFitBody {
    fn name() -> Cow<'static, str> {
        "NetworkFitBody".into()
    }

    fn schemas(schemas: &mut Vec<(String, RefOr<Schema>)>) {
        FitRequestBody::schemas(schemas);
    }
}

fn without_evidence(schema: RefOr<Schema>, says: &str) -> RefOr<Schema> {
    match schema {
        RefOr::T(Schema::Object(mut body)) => {
            body.properties.retain(|name, _| !EVIDENCE_FIELDS.contains(&name.as_str()));
            body.required.retain(|name| !EVIDENCE_FIELDS.contains(&name.as_str()));
            body.description = Some(says.to_owned());
            RefOr::T(Schema::Object(body))
        }
        other => other,
    }
}

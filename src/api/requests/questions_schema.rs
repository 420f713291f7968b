//! What is asked besides the tails, as it is documented.

use serde::Serialize;
use utoipa::ToSchema;

use super::schema::{ArrivalsBody, thresholds};

/// A limit on the number of hubs: at most `max_nodes` nodes with at least `threshold` links until `by`. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct LimitBody {
    /// A name to find its answer by, at most 200 characters.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_length = 1, max_length = 200, examples("fan-out shards"))]
    pub name: Option<String>,
    /// Links from which on a node counts.
    #[schema(minimum = 1, maximum = 9007199254740991u64, examples(1000))]
    pub threshold: u64,
    /// The most nodes that are provided for.
    #[schema(maximum = 9007199254740991u64, examples(20))]
    pub max_nodes: u64,
    /// The date up to which it must hold, after the newest snapshot: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2027-06-01"))]
    pub by: String,
    /// Probability of a crossing that you put up with, below 1.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, exclusive_maximum = 1, default = 0.05)]
    pub risk: Option<f64>,
}

/// A limit that is kept with a tracked network under the name in its address. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct KeptLimitBody {
    /// Links from which on a node counts.
    #[schema(minimum = 1, maximum = 9007199254740991u64, examples(1000))]
    pub threshold: u64,
    /// The most nodes that are provided for.
    #[schema(maximum = 9007199254740991u64, examples(20))]
    pub max_nodes: u64,
    /// The date up to which it must hold: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2027-06-01"))]
    pub by: String,
    /// Probability of a crossing that you put up with, below 1.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, exclusive_maximum = 1, default = 0.05)]
    pub risk: Option<f64>,
}

/// What a node with so many links costs: `per_node`, `per_link` or both. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct BandBody {
    /// Fewest links, included.
    #[schema(maximum = 9007199254740991u64, examples(10000))]
    pub from: u64,
    /// Most links, included; no upper end when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, maximum = 9007199254740991u64)]
    pub to: Option<u64>,
    /// Cost of a node.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e12, default = 0.0, examples(4.0))]
    pub per_node: Option<f64>,
    /// Cost of each of its links.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e12, default = 0.0, examples(0.0002))]
    pub per_link: Option<f64>,
}

/// Nodes and classes of nodes to follow, at least one of them, at most 500 together. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Default, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct WatchBody {
    /// Named nodes.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 500)]
    pub nodes: Option<Vec<WatchedNodeBody>>,
    /// All of today's nodes with so many links.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 500)]
    pub classes: Option<Vec<WatchedClassBody>>,
    /// Thresholds that they may pass; those of the forecast when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = thresholds)]
    pub thresholds: Option<Vec<u64>>,
}

/// A node with its degree at the newest snapshot.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct WatchedNodeBody {
    /// Your name for it.
    #[schema(min_length = 1, max_length = 200, examples("ana"))]
    pub name: String,
    /// Its degree today.
    #[schema(maximum = 9007199254740991u64, examples(812))]
    pub degree: u64,
}

/// All of today's nodes with so many links.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct WatchedClassBody {
    /// Fewest links today, included.
    #[schema(maximum = 9007199254740991u64, examples(500))]
    pub from: u64,
    /// Most links today, included.
    #[schema(maximum = 9007199254740991u64, examples(999))]
    pub to: u64,
}

/// A what-if: its name and what of the forces would be other than it is. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ScenarioBody {
    /// A name that no other scenario has.
    #[schema(min_length = 1, max_length = 200, examples("campaign"))]
    pub name: String,
    /// Arrivals from the newest snapshot on, in place of those that hold.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub arrivals: Option<ArrivalsBody>,
    /// Factor on the arrivals that hold; not together with `arrivals`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e6, examples(1.2))]
    pub arrivals_factor: Option<f64>,
    /// Link ends that land on nodes already present with each arrival.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub links_per_arrival: Option<f64>,
    /// Factor on the links per arrival that hold; not together with `links_per_arrival`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e6)]
    pub links_factor: Option<f64>,
    /// Share of landing links that pick their node in proportion to its degree.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1)]
    pub preferential_share: Option<f64>,
    /// Hazard that a node departs, per day.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub departures_per_node_day: Option<f64>,
    /// No node gains links beyond so many.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub degree_cap: Option<DegreeCapBody>,
}

/// What a kept what-if would change, at least one of the forces. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Default, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ChangeBody {
    /// Arrivals from the newest snapshot on, in place of those that hold.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub arrivals: Option<ArrivalsBody>,
    /// Factor on the arrivals that hold; not together with `arrivals`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e6, examples(1.2))]
    pub arrivals_factor: Option<f64>,
    /// Link ends that land on nodes already present with each arrival.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub links_per_arrival: Option<f64>,
    /// Factor on the links per arrival that hold; not together with `links_per_arrival`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e6)]
    pub links_factor: Option<f64>,
    /// Share of landing links that pick their node in proportion to its degree.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1)]
    pub preferential_share: Option<f64>,
    /// Hazard that a node departs, per day.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub departures_per_node_day: Option<f64>,
    /// No node gains links beyond so many.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub degree_cap: Option<DegreeCapBody>,
}

/// No node gains links beyond so many; nodes that have more keep them.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct DegreeCapBody {
    /// Most links of a node.
    #[schema(minimum = 1, maximum = 9007199254740991u64, examples(1000))]
    pub links: u64,
    /// What happens to the others.
    pub refused: RefusedLinksName,
}

/// What happens to links that would take a node past its cap.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum RefusedLinksName {
    /// They pick again among the nodes below the cap.
    Spread,
    /// They are not made.
    Lost,
}

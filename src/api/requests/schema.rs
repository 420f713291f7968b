//! Request bodies as they are documented, and as our own client writes them. Reading is done by hand, for the sake of
//! every fault's place; a test holds the two lists of fields against each other.

use std::collections::BTreeMap;

use serde::Serialize;
use serde_json::json;
use utoipa::ToSchema;
use utoipa::openapi::schema::{Array, ArrayBuilder, ArrayItems, ObjectBuilder, Schema, SchemaType, Type};
use utoipa::openapi::{KnownFormat, SchemaFormat};

use super::questions_schema::{BandBody, LimitBody, ScenarioBody, WatchBody};
use crate::model::{DegreeKind, MAX_DEGREE};

/// `[[degree, nodes], …]`
pub fn degree_pairs() -> Array {
    let pair = ArrayBuilder::new().items(whole(0)).min_items(Some(2)).max_items(Some(2));
    let example = json!([[0, 5400], [1, 1075], [2, 416], [40, 3]]);
    let says = "`[degree, nodes]` pairs in any order, no degree twice: so many nodes have exactly so many links.";
    ArrayBuilder::new().items(pair).min_items(Some(1)).description(Some(says)).examples([example]).build()
}

/// `[[degree, share], …]`
pub fn share_pairs() -> Array {
    let number = ObjectBuilder::new().schema_type(SchemaType::Type(Type::Number)).minimum(Some(0));
    let pair = ArrayBuilder::new().items(number).min_items(Some(2)).max_items(Some(2));
    let says = "`[degree, share]` pairs: the degrees newcomers arrive with; the shares add up to 1. Read from the data \
                when left out.";
    let example = json!([[0, 0.9], [2, 0.1]]);
    ArrayBuilder::new().items(pair).min_items(Some(1)).description(Some(says)).examples([example]).build()
}

/// Thresholds, each a degree.
pub(super) fn thresholds() -> Array {
    let says =
        "A hub is a node with at least this many links; one answer for each, in ascending order, repeats dropped.";
    let item = whole(1).maximum(Some(MAX_DEGREE as f64));
    ArrayBuilder::new().items(item).min_items(Some(1)).max_items(Some(1000)).description(Some(says)).build()
}

/// Levels of intervals.
pub(super) fn levels() -> Array {
    let says = "Levels of the intervals, each above 0 and at most 0.9999; 0.5 and 0.9 when left out.";
    let item = ObjectBuilder::new()
        .schema_type(SchemaType::Type(Type::Number))
        .exclusive_minimum(Some(0))
        .maximum(Some(0.9999));
    ArrayBuilder::new().items(item).min_items(Some(1)).max_items(Some(20)).description(Some(says)).build()
}

fn whole(least: u32) -> ObjectBuilder {
    ObjectBuilder::new()
        .schema_type(SchemaType::Type(Type::Integer))
        .format(Some(SchemaFormat::KnownFormat(KnownFormat::Int64)))
        .minimum(Some(least))
}

/// `[[degree before | null, degree after | null, nodes], …]`
pub fn move_rows() -> Array {
    let blank = || {
        let kinds = SchemaType::from_iter([Type::Integer, Type::Null]);
        whole(0).schema_type(kinds).maximum(Some(MAX_DEGREE as f64)).build().into()
    };
    let says = "`[degree before, degree after, nodes]` rows in any order, no pair of degrees twice; null before: the \
                nodes arrived since, null after: they departed.";
    let example = json!([[0, 0, 4900], [0, 1, 300], [null, 0, 1200], [7, null, 2]]);
    rows(vec![blank(), blank(), whole(0).build().into()]).description(Some(says)).examples([example]).build()
}

/// `[[ratio, variance, landings], …]`
fn ratio_rows() -> Array {
    let says = "`[ratio, variance, landings]` rows: so many links landed on nodes whose degree just before was about \
                ratio times the mean degree, with this variance of the ratio among them.";
    let example = json!([[0.5, 0.001, 210], [1.0, 0.002, 340], [8.0, 0.05, 120]]);
    rows(vec![real(), real(), whole(0).build().into()]).description(Some(says)).examples([example]).build()
}

/// `[[lowest, highest, landings, node exposure, end exposure], …]`
fn cell_rows() -> Array {
    let degree = || whole(0).maximum(Some(MAX_DEGREE as f64)).build().into();
    let says = "`[lowest degree, highest degree, landings, node exposure, end exposure]` cells in ascending degree: \
                landings on nodes of these degrees, and the nodes and their link ends just before each landing of \
                the window, summed over its landings.";
    let example = json!([[0, 0, 12, 54000.0, 0.0], [1, 3, 30, 22000.0, 41000.0]]);
    let row = vec![degree(), degree(), whole(0).build().into(), real(), real()];
    rows(row).description(Some(says)).examples([example]).build()
}

fn rows(cells: Vec<Schema>) -> ArrayBuilder {
    let width = cells.len();
    let row = ArrayBuilder::new().prefix_items(cells).items(ArrayItems::False);
    ArrayBuilder::new().items(row.min_items(Some(width)).max_items(Some(width)))
}

fn real() -> Schema {
    ObjectBuilder::new().schema_type(SchemaType::Type(Type::Number)).minimum(Some(0)).build().into()
}

/// What a forecast is made from and what is asked of it. Unknown fields are refused. Give either `dates` or `horizon`.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ForecastRequestBody {
    /// What a degree counts.
    pub degree_kind: DegreeKindName,
    /// Degree counts at one date or several, oldest first.
    #[schema(min_items = 1, max_items = 1000)]
    pub snapshots: Vec<SnapshotBody>,
    /// Between dates, how many nodes went from each degree to each other; oldest first, periods that do not overlap. Where
    /// a table and a snapshot have a date in common, they must have the same degree counts.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 1000)]
    pub transitions: Option<Vec<TransitionsBody>>,
    /// Attachment statistics of the time-ordered list of links.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub link_events: Option<LinkEventsBody>,
    /// Arrivals from the newest snapshot on. Needed with one snapshot; estimated when left out with two or more.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub arrivals: Option<ArrivalsBody>,
    /// Link ends that land on nodes already present with each arrival; read from the data when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub links_per_arrival: Option<f64>,
    /// Link ends that land per present node and day, whoever arrives.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub links_per_node_day: Option<f64>,
    /// `[degree, share]` pairs: the degrees newcomers arrive with; the shares add up to 1. Read from the data when
    /// left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = share_pairs)]
    pub entry_degrees: Option<Vec<(u64, f64)>>,
    /// Hazard that a node departs, per day; read from transitions, or none, when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub departures_per_node_day: Option<f64>,
    /// Hazard that a link is lost, per day; read from transitions, or none, when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub link_losses_per_link_day: Option<f64>,
    /// A hub is a node with at least this many links; one answer for each, in ascending order, repeats dropped.
    #[schema(schema_with = thresholds)]
    pub thresholds: Vec<u64>,
    /// Dates to forecast, each after the newest snapshot: RFC 3339, or a bare date for 00:00 UTC. Answered in
    /// ascending order, repeats dropped.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_items = 1, max_items = 4000)]
    pub dates: Option<Vec<String>>,
    /// Evenly spread dates in place of `dates`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub horizon: Option<HorizonBody>,
    /// Which candidate to use.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub model: Option<ModelName>,
    /// Evidence to read the mix from; the best there is when left out: snapshots, then transitions, then link events, then
    /// the one snapshot.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub evidence: Option<EvidenceName>,
    /// What to take as given instead of fitting it.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub fixed: Option<FixedBody>,
    /// Levels of the intervals, each above 0 and at most 0.9999; 0.5 and 0.9 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = levels, required = false)]
    pub levels: Option<Vec<f64>>,
    /// Limits on the number of hubs to answer for.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 50)]
    pub limits: Option<Vec<LimitBody>>,
    /// What nodes cost by their degree, in bands that do not overlap; a degree in none of them costs nothing.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_items = 1, max_items = 50)]
    pub bands: Option<Vec<BandBody>>,
    /// The unit of the bands' costs.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_length = 1, max_length = 200, examples("EUR/month"))]
    pub cost_unit: Option<String>,
    /// Nodes and classes of nodes to follow.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub watch: Option<WatchBody>,
    /// So many of the largest nodes' degrees.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 1, maximum = 100)]
    pub next_hubs: Option<u64>,
    /// What-ifs, each set beside the forecast as it stands.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 10)]
    pub scenarios: Option<Vec<ScenarioBody>>,
    /// Seed of everything random, so far the samples behind the goodness of fit; 1 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, maximum = 9007199254740991u64)]
    pub seed: Option<u64>,
    /// A name for the run, to list it by.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_length = 200)]
    pub label: Option<String>,
}

/// What a fit is made from. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct FitRequestBody {
    /// What a degree counts.
    pub degree_kind: DegreeKindName,
    /// Degree counts at one date or several, oldest first.
    #[schema(min_items = 1, max_items = 1000)]
    pub snapshots: Vec<SnapshotBody>,
    /// Between dates, how many nodes went from each degree to each other; oldest first, periods that do not overlap. Where
    /// a table and a snapshot have a date in common, they must have the same degree counts.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 1000)]
    pub transitions: Option<Vec<TransitionsBody>>,
    /// Attachment statistics of the time-ordered list of links.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub link_events: Option<LinkEventsBody>,
    /// Link ends that land on nodes already present with each arrival; read from the data when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9)]
    pub links_per_arrival: Option<f64>,
    /// `[degree, share]` pairs: the degrees newcomers arrive with; the shares add up to 1. Read from the data when
    /// left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(schema_with = share_pairs)]
    pub entry_degrees: Option<Vec<(u64, f64)>>,
    /// Link ends that land per present node and day, whoever arrives.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub links_per_node_day: Option<f64>,
    /// Hazard that a node departs, per day; read from transitions, or none, when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub departures_per_node_day: Option<f64>,
    /// Hazard that a link is lost, per day; read from transitions, or none, when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1e9, default = 0.0)]
    pub link_losses_per_link_day: Option<f64>,
    /// Which candidate to use.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub model: Option<ModelName>,
    /// Evidence to read the mix from; the best there is when left out: snapshots, then transitions, then link events, then
    /// the one snapshot.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub evidence: Option<EvidenceName>,
    /// What to take as given instead of fitting it.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false)]
    pub fixed: Option<FixedBody>,
    /// Seed of everything random, so far the samples behind the goodness of fit; 1 when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, maximum = 9007199254740991u64)]
    pub seed: Option<u64>,
    /// A name for the run, to list it by.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_length = 200)]
    pub label: Option<String>,
}

/// What a degree counts.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum DegreeKindName {
    /// Links received.
    Received,
    /// All links of an undirected network.
    Total,
}

impl From<DegreeKind> for DegreeKindName {
    fn from(kind: DegreeKind) -> Self {
        match kind {
            DegreeKind::Received => Self::Received,
            DegreeKind::Total => Self::Total,
        }
    }
}

/// Degree counts at a date.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct SnapshotBody {
    /// The date the counts hold for: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2026-06-01"))]
    pub as_of: String,
    /// `[degree, nodes]` pairs in any order, no degree twice: so many nodes have exactly so many links.
    #[schema(schema_with = degree_pairs)]
    pub degree_counts: Vec<(u64, u64)>,
}

/// Where every node's degree went between two dates.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct TransitionsBody {
    /// The earlier date: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2026-05-01"))]
    pub from: String,
    /// The later date.
    #[schema(examples("2026-06-01"))]
    pub to: String,
    /// `[degree before, degree after, nodes]` rows; null before: arrived since, null after: departed.
    #[schema(schema_with = move_rows)]
    pub counts: Vec<(Option<u64>, Option<u64>, u64)>,
}

/// What a time-ordered link list tells of attachment: each landing with its target's degree just before, summed up.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct LinkEventsBody {
    /// Landings by the ratio of their target's degree to the mean degree.
    #[schema(schema_with = ratio_rows)]
    pub ratios: Vec<(f64, f64, u64)>,
    /// Landings and exposure by degree, stretch by stretch, oldest first.
    pub windows: Vec<WindowBody>,
}

/// A stretch of the link list over which the network grew by a few per cent.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct WindowBody {
    /// `[lowest degree, highest degree, landings, node exposure, end exposure]` cells.
    #[schema(schema_with = cell_rows)]
    pub cells: Vec<(u64, u64, u64, f64, f64)>,
}

/// How many nodes arrive: `per_day` (and `growth_per_year`), `segments` or `csv`; seasons on top of it (where several hold, their
/// factors multiply, in UTC) up to the last date asked; and how uncertain the rates are, in at most one way. The given rates stay the
/// medians.
#[derive(Debug, Clone, PartialEq, Default, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct ArrivalsBody {
    /// Nodes a day at the newest snapshot.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0)]
    pub per_day: Option<f64>,
    /// Relative growth of the rate a year: 0.2 is 20 % more each year.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, exclusive_minimum = -1, maximum = 99)]
    pub growth_per_year: Option<f64>,
    /// Stretches with rates of their own, ascending; the first starts at or before the newest snapshot.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_items = 1)]
    pub segments: Option<Vec<SegmentBody>>,
    /// Segments as a table: columns `from`, `per_day` and, if wanted, `growth_per_year`, in any order below a header; separated by
    /// commas, semicolons or tabs.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, examples("from,per_day\n2026-06-01,40\n2026-09-01,55\n"))]
    pub csv: Option<String>,
    /// Factors on the rate in the calendar months, January first.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_items = 12, max_items = 12)]
    pub months: Option<Vec<f64>>,
    /// Factors on the rate in ISO weeks, by number; 1 in the others. Week 53 holds in the years that have one.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, example = json!({"47": 3.0}))]
    pub weeks: Option<BTreeMap<String, f64>>,
    /// Campaigns, launches, pauses: a factor on the rate for a while.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, max_items = 200)]
    pub campaigns: Option<Vec<CampaignBody>>,
    /// Standard deviation of `per_day`, nodes a day.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0)]
    pub standard_deviation: Option<f64>,
    /// Central 90 % range about `per_day`, nodes a day: `[low, high]`.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, value_type = Option<Vec<f64>>, min_items = 2, max_items = 2)]
    pub range: Option<(f64, f64)>,
    /// Standard deviation over the rate, of any plan: 0.1 is 10 %.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0)]
    pub relative_deviation: Option<f64>,
}

/// A campaign, a launch or a pause.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct CampaignBody {
    /// Its start: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2026-11-20"))]
    pub from: String,
    /// Its end, not in it any more.
    #[schema(examples("2026-12-01"))]
    pub until: String,
    /// On the rate: 2 doubles it, 0 stops it.
    #[schema(minimum = 0, maximum = 1000)]
    pub factor: f64,
}

/// One stretch of an arrival plan; the last goes on for ever.
#[derive(Debug, Clone, PartialEq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct SegmentBody {
    /// Its start: RFC 3339, or a bare date for 00:00 UTC.
    #[schema(examples("2026-06-01"))]
    pub from: String,
    /// Nodes a day at its start.
    #[schema(minimum = 0)]
    pub per_day: f64,
    /// Relative growth of the rate a year.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, exclusive_minimum = -1, maximum = 99)]
    pub growth_per_year: Option<f64>,
}

/// Evenly spread dates: one step after the newest snapshot, two steps, and so on. Give either `until` or `ends_after`.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct HorizonBody {
    /// No date comes after this one: RFC 3339, or a bare date for 00:00 UTC.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, examples("2027-12-01"))]
    pub until: Option<String>,
    /// No date comes later than this after the newest snapshot: an ISO 8601 duration.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, examples("P1Y"))]
    pub ends_after: Option<String>,
    /// The step, an ISO 8601 duration; months and years go by the calendar.
    #[schema(examples("P1M"))]
    pub every: String,
}

/// A candidate for how landing links pick their node.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum ModelName {
    /// The one that the evidence favours.
    Auto,
    /// Every node alike.
    Uniform,
    /// In proportion to degree.
    Preferential,
    /// A share of each.
    Mix,
    /// A mix whose preferential links follow a power of the degree.
    Power,
    /// A mix among the nodes that still draw links.
    Dormancy,
    /// A mix among nodes that differ in how fast they grow.
    GrowthVariance,
}

/// What to take as given: any of these, of the last three only one.
#[derive(Debug, Clone, PartialEq, Default, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct FixedBody {
    /// Share of landing links that pick their node in proportion to its degree.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 1)]
    pub preferential_share: Option<f64>,
    /// Power of the degree that preferential links follow; 1 is in proportion.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 2)]
    pub kernel_exponent: Option<f64>,
    /// Share of present nodes that draw no links.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 0.99)]
    pub dormant_share: Option<f64>,
    /// Variance of the nodes' growth factors, whose mean is 1.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, minimum = 0, maximum = 6)]
    pub growth_variance: Option<f64>,
}

/// Evidence that the mix can be read from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, ToSchema)]
#[serde(rename_all = "snake_case")]
pub enum EvidenceName {
    /// The newest snapshot alone.
    OneSnapshot,
    /// How many nodes crossed each degree between snapshots.
    SuccessiveSnapshots,
    /// Each node's degree before and after.
    Transitions,
    /// Each landing link.
    LinkEvents,
}

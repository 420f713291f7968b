//! Heronsgate, an invented platform for audio posts: nodes are accounts, a degree is the followers received.

use jiff::{Timestamp, ToSpan, tz::TimeZone};

use crate::api::{ArrivalsBody, DegreeKindName, ForecastRequestBody, SnapshotBody};
use crate::app::Stop;
use crate::growth::Simulation;
use crate::model::{
    ArrivalPlan, ArrivalSegment, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters, days_between,
};
use crate::report::figure;
use crate::service::date_text;

/// Seed of the network.
const SEED: u64 = 1_207;
/// True share of follows that land in proportion to followers, which the forecast has to find out.
pub const TRUE_SHARE: f64 = 0.72;
/// Follows that land with each new account.
const FOLLOWS: f64 = 5.0;
/// New accounts a day at launch.
const LAUNCH_PER_DAY: f64 = 40.0;
/// Growth of that rate a year.
const GROWTH_PER_YEAR: f64 = 0.4;
/// Accounts at launch: the founders, each with a few followers.
const FOUNDERS: [(u64, u64); 2] = [(0, 20), (5, 20)];
const LAUNCH: &str = "2023-12-14T00:00:00Z";
/// Date of the snapshot that the forecast is made from.
const SNAPSHOT: &str = "2026-06-01T00:00:00Z";
/// A post by an account with so many followers is delivered by a pool of its own size.
const THRESHOLDS: [u64; 4] = [50, 200, 1_000, 3_000];
/// Months after the snapshot that are forecast.
const MONTHS: [i64; 2] = [6, 12];

/// The network at the snapshot, what is asked about it, and its future, yet unseen.
pub struct Story {
    /// The request that a client would send.
    pub request: ForecastRequestBody,
    accounts: u64,
    network: Simulation,
    dates: Vec<Timestamp>,
    launch: Timestamp,
}

/// How many accounts really had so many followers at a date.
pub struct Outcome {
    /// The date as answers write it.
    pub date: String,
    /// The threshold.
    pub threshold: u64,
    /// The accounts at or above it.
    pub nodes: u64,
}

impl Story {
    /// Grows the network from its launch to the snapshot.
    pub fn grow() -> Result<Self, Stop> {
        let broken = |error: &dyn std::fmt::Display| Stop::failed("the demo network", error);
        let time = |text: &str| text.parse::<Timestamp>().map_err(|error| broken(&error));
        let (launch, snapshot) = (time(LAUNCH)?, time(SNAPSHOT)?);
        let dates = MONTHS
            .iter()
            .map(|&months| snapshot.to_zoned(TimeZone::UTC).checked_add(months.months()).map(|date| date.timestamp()))
            .collect::<Result<Vec<_>, _>>()
            .map_err(|error| broken(&error))?;
        let start = DegreeCounts::from_pairs(&FOUNDERS).map_err(|faults| broken(&format!("{faults:?}")))?;
        let (forces, arrivals_per_day) = forces(days_between(launch, snapshot))?;
        let mut network = Simulation::new(&start, forces, SEED).map_err(|error| broken(&error))?;
        network.run_until(days_between(launch, snapshot)).map_err(|error| broken(&error))?;
        let counts = network.degree_counts().map_err(|faults| broken(&format!("{faults:?}")))?;
        let request = request(&counts, snapshot, arrivals_per_day, &dates);
        Ok(Self { request, accounts: counts.nodes(), network, dates, launch })
    }

    /// The scenario in words.
    pub fn introduction(&self) -> String {
        format!(
            "Heronsgate is an invented platform for audio posts, grown here event by event (seed {SEED}) from its launch \
             on {} to {}, when it has {} accounts. A degree is the followers an account has received. Its planners know \
             the degree counts and that new accounts keep arriving, and ask how many accounts will have so many \
             followers that delivering one of their posts is a load of its own.",
            &LAUNCH[..10],
            &SNAPSHOT[..10],
            figure(self.accounts as f64)
        )
    }

    /// Grows the network on to the dates and counts.
    pub fn what_came(mut self) -> Result<Vec<Outcome>, Stop> {
        let mut outcomes = Vec::new();
        for &date in &self.dates {
            self.network
                .run_until(days_between(self.launch, date))
                .map_err(|error| Stop::failed("the demo network", error))?;
            let counts = self.network.degree_counts();
            let counts = counts.map_err(|faults| Stop::failed("the demo network", format!("{faults:?}")))?;
            outcomes.extend(THRESHOLDS.map(|threshold| Outcome {
                date: date_text(date),
                threshold,
                nodes: counts.tail_size(threshold),
            }));
        }
        Ok(outcomes)
    }
}

/// The forces that grow Heronsgate, and its arrivals a day at the snapshot.
fn forces(snapshot_day: f64) -> Result<(GrowthParameters, f64), Stop> {
    let broken = |error: &dyn std::fmt::Debug| Stop::Failed(format!("the demo network: {error:?}"));
    let segment = ArrivalSegment { from_day: 0.0, per_day: LAUNCH_PER_DAY, growth_per_year: GROWTH_PER_YEAR };
    let arrivals = ArrivalPlan::from_segments(&[segment]).map_err(|faults| broken(&faults))?;
    let per_day = arrivals.rate(snapshot_day);
    let mix = AttachmentMix::new(TRUE_SHARE).ok_or_else(|| broken(&TRUE_SHARE))?;
    GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), FOLLOWS)
        .map(|forces| (forces, per_day))
        .map_err(|fault| broken(&fault))
}

fn request(
    counts: &DegreeCounts,
    snapshot: Timestamp,
    arrivals_per_day: f64,
    dates: &[Timestamp],
) -> ForecastRequestBody {
    let arrivals = ArrivalsBody {
        per_day: Some(arrivals_per_day),
        growth_per_year: Some(GROWTH_PER_YEAR),
        ..ArrivalsBody::default()
    };
    ForecastRequestBody {
        transitions: None,
        link_events: None,
        degree_kind: DegreeKindName::Received,
        snapshots: vec![SnapshotBody { as_of: date_text(snapshot), degree_counts: counts.iter().collect() }],
        arrivals: Some(arrivals),
        links_per_arrival: Some(FOLLOWS),
        links_per_node_day: None,
        entry_degrees: None,
        departures_per_node_day: None,
        link_losses_per_link_day: None,
        thresholds: THRESHOLDS.to_vec(),
        dates: Some(dates.iter().map(|&date| date_text(date)).collect()),
        horizon: None,
        model: None,
        evidence: None,
        fixed: None,
        levels: None,
        limits: None,
        bands: None,
        cost_unit: None,
        watch: None,
        next_hubs: None,
        scenarios: None,
        seed: None,
        label: Some("Heronsgate demo".to_owned()),
    }
}

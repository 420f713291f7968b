//! Networks that several tests grow or read.

use std::collections::BTreeMap;

use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, GrowthParameters, Move, Snapshot,
    Transitions,
};

use crate::reference::{number, rows};

/// Links received, one arrival a day, newcomers without links.
pub fn forces(share: f64, links_per_arrival: f64) -> GrowthParameters {
    let mix = AttachmentMix::new(share).unwrap();
    let plan = ArrivalPlan::constant(1.0).unwrap();
    GrowthParameters::new(DegreeKind::Received, mix, plan, EntryDegrees::single(0), links_per_arrival).unwrap()
}

/// Total degree: each newcomer brings `links_each` links of its own.
pub fn total_forces(share: f64, links_each: u64) -> GrowthParameters {
    let mix = AttachmentMix::new(share).unwrap();
    let plan = ArrivalPlan::constant(1.0).unwrap();
    let entry = EntryDegrees::single(links_each);
    GrowthParameters::new(DegreeKind::Total, mix, plan, entry, links_each as f64).unwrap()
}

pub fn counts(pairs: &[(u64, u64)]) -> DegreeCounts {
    DegreeCounts::from_pairs(pairs).unwrap()
}

/// A network of 1,000 nodes whose mean degree is far from what growth at three links per arrival leads to.
pub fn young_network() -> DegreeCounts {
    counts(&[(0, 600), (1, 200), (2, 100), (4, 60), (8, 30), (20, 9), (60, 1)])
}

/// Snapshots of a real network in `examples/data`, oldest first.
pub fn snapshots(network: &str) -> Vec<Snapshot> {
    let as_of_column = if network == "debian" { 1 } else { 0 };
    let mut by_date: BTreeMap<String, Vec<(u64, u64)>> = BTreeMap::new();
    for row in rows(&format!("../../examples/data/{network}/degree_counts.csv")) {
        let pair = (number(&row[as_of_column + 1]) as u64, number(&row[as_of_column + 2]) as u64);
        by_date.entry(row[as_of_column].clone()).or_default().push(pair);
    }
    let snapshot = |(date, pairs): (String, Vec<(u64, u64)>)| {
        let as_of = if date.contains('T') { date } else { format!("{date}T00:00:00Z") };
        Snapshot { as_of: as_of.parse().unwrap(), counts: counts(&pairs) }
    };
    by_date.into_iter().map(snapshot).collect()
}

/// Transitions of a real network in `examples/data`, oldest first.
pub fn transitions(network: &str) -> Vec<Transitions> {
    let mut periods: BTreeMap<[String; 2], Vec<Move>> = BTreeMap::new();
    for row in rows(&format!("../../examples/data/{network}/transitions.csv")) {
        let degree = |text: &String| (!text.is_empty()).then(|| number(text) as u64);
        let step = Move { before: degree(&row[2]), after: degree(&row[3]), nodes: number(&row[4]) as u64 };
        periods.entry([row[0].clone(), row[1].clone()]).or_default().push(step);
    }
    let date = |text: &str| {
        let text = if text.contains('T') { text.to_owned() } else { format!("{text}T00:00:00Z") };
        text.parse().unwrap()
    };
    periods.iter().map(|([from, to], moves)| Transitions::new(date(from), date(to), moves).unwrap()).collect()
}

pub fn evidence(kind: DegreeKind, snapshots: &[Snapshot]) -> Evidence {
    Evidence::new(kind, snapshots.to_vec(), None).unwrap()
}

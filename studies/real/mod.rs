//! The real networks of `examples/data`; their sources are in the README beside each table.

use std::collections::BTreeMap;
use std::path::PathBuf;

use tailcast::model::{DegreeCounts, Snapshot};

/// Snapshots of a network of `examples/data`, oldest first.
pub fn snapshots(network: &str) -> Vec<Snapshot> {
    let path: PathBuf = [env!("CARGO_MANIFEST_DIR"), "examples/data", network, "degree_counts.csv"].iter().collect();
    let table = std::fs::read_to_string(path).expect("the table");
    // Debian's table names the suite in front of its date.
    let column = usize::from(table.starts_with("suite"));
    let mut by_date: BTreeMap<String, Vec<(u64, u64)>> = BTreeMap::new();
    for row in table.lines().skip(1).map(|line| line.split(',').collect::<Vec<_>>()) {
        let pair = (row[column + 1].parse().expect("a degree"), row[column + 2].parse().expect("a count"));
        by_date.entry(row[column].to_owned()).or_default().push(pair);
    }
    let snapshot = |(date, pairs): (String, Vec<(u64, u64)>)| {
        let as_of = if date.contains('T') { date } else { format!("{date}T00:00:00Z") };
        Snapshot {
            as_of: as_of.parse().expect("a date"),
            counts: DegreeCounts::from_pairs(&pairs).expect("sound counts"),
        }
    };
    by_date.into_iter().map(snapshot).collect()
}

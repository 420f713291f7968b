//! Everything that is stored of a network, put together as evidence.

use std::collections::BTreeMap;
use std::fmt::Display;

use jiff::Timestamp;
use serde::Deserialize;
use serde::de::DeserializeOwned;

use crate::model::{
    AttachmentCell, AttachmentWindow, DegreeCounts, EntryDegrees, Evidence, LinkEvents, Move, RatioClass, Snapshot,
    Transitions,
};
use crate::service::ServiceError;
use crate::store::StoredEvidence;

#[derive(Deserialize)]
struct Statistics {
    ratios: Vec<(f64, f64, u64)>,
    windows: Vec<Window>,
}

#[derive(Deserialize)]
struct Window {
    cells: Vec<(u64, u64, u64, f64, f64)>,
}

/// The evidence. A table of transitions tells the degree counts at both its dates: where no snapshot of such a date is
/// stored, the table's counts stand for it.
pub fn evidence(stored: StoredEvidence) -> Result<Evidence, ServiceError> {
    let mut counts = BTreeMap::new();
    for (as_of, text) in &stored.snapshots {
        let pairs: Vec<(u64, u64)> = parsed(text)?;
        counts.insert(*as_of, DegreeCounts::from_pairs(&pairs).map_err(never_written)?);
    }
    let tables =
        stored.transitions.iter().map(|(from, to, text)| table(*from, *to, text)).collect::<Result<Vec<_>, _>>()?;
    for table in &tables {
        for (date, told) in [(table.from(), table.counts_before()), (table.to(), table.counts_after())] {
            if let Some(told) = told {
                counts.entry(date).or_insert(told);
            }
        }
    }
    if counts.is_empty() {
        return Err(ServiceError::NoSnapshot);
    }
    let settings = stored.network.settings;
    let entry = settings.entry_degrees.as_deref().map(entry_degrees).transpose()?;
    let snapshots = counts.into_iter().map(|(as_of, counts)| Snapshot { as_of, counts }).collect();
    // What single writes cannot see, such as too many dates in all, is the caller's to mend.
    let evidence = Evidence::new(settings.degree_kind, snapshots, entry).map_err(unfit)?;
    let evidence = evidence.with_transitions(tables).map_err(unfit)?;
    Ok(match stored.link_events.as_deref().map(link_events).transpose()? {
        Some(events) => evidence.with_link_events(events),
        None => evidence,
    })
}

fn table(from: Timestamp, to: Timestamp, text: &str) -> Result<Transitions, ServiceError> {
    let rows: Vec<(Option<u64>, Option<u64>, u64)> = parsed(text)?;
    let moves: Vec<Move> = rows.into_iter().map(|(before, after, nodes)| Move { before, after, nodes }).collect();
    Transitions::new(from, to, &moves).map_err(never_written)
}

fn entry_degrees(text: &str) -> Result<EntryDegrees, ServiceError> {
    EntryDegrees::from_shares(&parsed::<Vec<(u64, f64)>>(text)?).map_err(never_written)
}

fn link_events(text: &str) -> Result<LinkEvents, ServiceError> {
    let given: Statistics = parsed(text)?;
    let ratio = |(ratio, variance, landings)| RatioClass { ratio, variance, landings };
    let cell = |(lowest, highest, landings, node_exposure, end_exposure)| AttachmentCell {
        lowest,
        highest,
        landings,
        node_exposure,
        end_exposure,
    };
    let window = |window: Window| AttachmentWindow { cells: window.cells.into_iter().map(cell).collect() };
    let windows = given.windows.into_iter().map(window).collect();
    LinkEvents::new(given.ratios.into_iter().map(ratio).collect(), windows).map_err(never_written)
}

fn parsed<T: DeserializeOwned>(text: &str) -> Result<T, ServiceError> {
    serde_json::from_str(text).map_err(|error| ServiceError::Broken(format!("stored evidence cannot be read: {error}")))
}

fn never_written(faults: Vec<impl Display>) -> ServiceError {
    ServiceError::Broken(format!("stored evidence that was never written: {}", in_words(&faults)))
}

fn unfit(faults: Vec<impl Display>) -> ServiceError {
    ServiceError::Impossible(format!("what is stored of the network makes no evidence: {}", in_words(&faults)))
}

fn in_words(faults: &[impl Display]) -> String {
    faults.iter().take(3).map(ToString::to_string).collect::<Vec<_>>().join("; ")
}

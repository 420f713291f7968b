//! Evidence as it is stored: compact JSON with its digest and totals beside it.

use serde::Serialize;

use crate::model::{AttachmentCell, DegreeCounts, LinkEvents, Snapshot, Transitions};
use crate::service::{Real, sha256_hex};
use crate::store::{
    EndTags, SnapshotSummary, StoredLinkEvents, StoredSnapshot, StoredTransitions, TransitionsSummary, kept_now,
};

/// A snapshot as stored.
pub fn snapshot(snapshot: &Snapshot) -> Result<StoredSnapshot, serde_json::Error> {
    let counts = &snapshot.counts;
    let degree_counts = pairs(counts)?;
    let summary = SnapshotSummary {
        as_of: snapshot.as_of,
        nodes: counts.nodes(),
        link_ends: counts.link_ends(),
        largest_degree: counts.largest(),
        rows: counts.degrees().len() as u64,
        tag: sha256_hex(degree_counts.as_bytes()),
        updated_at: kept_now(),
    };
    Ok(StoredSnapshot { summary, degree_counts })
}

/// A table of transitions as stored, and the tags that snapshots of its dates must have.
pub fn transitions(table: &Transitions) -> Result<(StoredTransitions, EndTags), serde_json::Error> {
    let rows: Vec<_> = table.moves().iter().map(|row| (row.before, row.after, row.nodes)).collect();
    let counts = serde_json::to_string(&rows)?;
    let tag = |counts: DegreeCounts| Ok::<_, serde_json::Error>(sha256_hex(pairs(&counts)?.as_bytes()));
    let before = table.counts_before().map(tag).transpose()?.unwrap_or_default();
    let ends = EndTags { before, after: table.counts_after().map(tag).transpose()? };
    let summary = TransitionsSummary {
        from: table.from(),
        to: table.to(),
        stayed: table.stayed(),
        arrived: table.arrived(),
        departed: table.departed(),
        rows: rows.len() as u64,
        tag: sha256_hex(counts.as_bytes()),
        updated_at: kept_now(),
    };
    Ok((StoredTransitions { summary, counts }, ends))
}

/// Attachment statistics as stored, in the form in which they are given.
pub fn link_events(events: &LinkEvents) -> Result<StoredLinkEvents, serde_json::Error> {
    #[derive(Serialize)]
    struct Statistics {
        ratios: Vec<(Real, Real, u64)>,
        windows: Vec<Window>,
    }
    #[derive(Serialize)]
    struct Window {
        cells: Vec<(u64, u64, u64, Real, Real)>,
    }
    let cell = |cell: &AttachmentCell| {
        (cell.lowest, cell.highest, cell.landings, Real(cell.node_exposure), Real(cell.end_exposure))
    };
    let windows = events.windows().iter().map(|window| Window { cells: window.cells.iter().map(cell).collect() });
    let ratios = events.ratios().iter().map(|class| (Real(class.ratio), Real(class.variance), class.landings));
    let statistics = serde_json::to_string(&Statistics { ratios: ratios.collect(), windows: windows.collect() })?;
    let cells: usize = events.windows().iter().map(|window| window.cells.len()).sum();
    Ok(StoredLinkEvents {
        landings: events.landings(),
        rows: (events.ratios().len() + cells) as u64,
        tag: sha256_hex(statistics.as_bytes()),
        updated_at: kept_now(),
        statistics,
    })
}

/// Digest of degree counts: the same as of a snapshot that has them.
pub fn counts_tag(counts: &DegreeCounts) -> Result<String, serde_json::Error> {
    Ok(sha256_hex(pairs(counts)?.as_bytes()))
}

fn pairs(counts: &DegreeCounts) -> Result<String, serde_json::Error> {
    serde_json::to_string(&counts.iter().collect::<Vec<_>>())
}

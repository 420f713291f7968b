//! A tally in the form that a request's body takes.

use serde::ser::{Serialize, SerializeMap, Serializer};

use crate::census::Tally;
use crate::model::{AttachmentWindow, DegreeKind, LinkEvents, Snapshot, Transitions};

/// The fields of a request's body that tell of the network; those of which nothing is known are left out.
pub struct EvidenceBody<'t>(pub &'t Tally);

impl Serialize for EvidenceBody<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let Tally { kind, snapshots, transitions, link_events, .. } = self.0;
        let mut body = serializer.serialize_map(None)?;
        let kind = match kind {
            DegreeKind::Received => "received",
            DegreeKind::Total => "total",
        };
        body.serialize_entry("degree_kind", kind)?;
        body.serialize_entry("snapshots", &List(|| snapshots.iter().map(SnapshotBody)))?;
        if !transitions.is_empty() {
            body.serialize_entry("transitions", &List(|| transitions.iter().map(TransitionsBody)))?;
        }
        if let Some(events) = link_events {
            body.serialize_entry("link_events", &LinkEventsBody(events))?;
        }
        body.end()
    }
}

/// An array of what an iterator gives.
struct List<F>(F);

impl<I: IntoIterator<Item: Serialize>, F: Fn() -> I> Serialize for List<F> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_seq((self.0)())
    }
}

struct SnapshotBody<'t>(&'t Snapshot);

impl Serialize for SnapshotBody<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut body = serializer.serialize_map(Some(2))?;
        body.serialize_entry("as_of", &self.0.as_of.to_string())?;
        body.serialize_entry("degree_counts", &List(|| self.0.counts.iter()))?;
        body.end()
    }
}

struct TransitionsBody<'t>(&'t Transitions);

impl Serialize for TransitionsBody<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut body = serializer.serialize_map(Some(3))?;
        body.serialize_entry("from", &self.0.from().to_string())?;
        body.serialize_entry("to", &self.0.to().to_string())?;
        let rows = || self.0.moves().iter().map(|row| (row.before, row.after, row.nodes));
        body.serialize_entry("counts", &List(rows))?;
        body.end()
    }
}

struct LinkEventsBody<'t>(&'t LinkEvents);

impl Serialize for LinkEventsBody<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut body = serializer.serialize_map(Some(2))?;
        let ratios = || self.0.ratios().iter().map(|class| (class.ratio, class.variance, class.landings));
        body.serialize_entry("ratios", &List(ratios))?;
        body.serialize_entry("windows", &List(|| self.0.windows().iter().map(WindowBody)))?;
        body.end()
    }
}

struct WindowBody<'t>(&'t AttachmentWindow);

impl Serialize for WindowBody<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut body = serializer.serialize_map(Some(1))?;
        let cells = || {
            let cells = self.0.cells.iter();
            cells.map(|cell| (cell.lowest, cell.highest, cell.landings, cell.node_exposure, cell.end_exposure))
        };
        body.serialize_entry("cells", &List(cells))?;
        body.end()
    }
}

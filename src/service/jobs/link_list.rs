//! Counting a kept link list: what is to be done, and what the list tells.

use std::fs::File;
use std::io::ErrorKind;
use std::ops::ControlFlow;
use std::path::Path;

use jiff::Span;
use serde::{Deserialize, Serialize};

use super::board::{Progress, Stop};
use super::outcome::{JobFault, JobProblem, LinkListResult, SkippedLines};
use crate::census::{CensusError, Tally};
use crate::ingest::{FaultPolicy, IngestError, LinkListPlan, LinkReport, count_links};
use crate::model::DegreeKind;
use crate::service::evidence::encode;
use crate::service::{ServiceError, date_text, kind_name};
use crate::store::DerivedEvidence;

/// Share of the work that is done when the last byte is read; the rest is storing.
const READ_SHARE: f64 = 0.98;

/// How a link list is to be counted.
#[derive(Debug, Clone, Copy)]
pub struct LinkListTask {
    /// Period of the snapshots; none for the last state alone.
    pub every: Option<Span>,
    /// What to do with faulty lines.
    pub faults: FaultPolicy,
}

/// What a list tells, ready to be stored.
#[derive(Debug)]
pub struct Told {
    /// The evidence.
    pub derived: DerivedEvidence,
    /// What is answered.
    pub result: LinkListResult,
}

/// Why counting ended before the list did.
#[derive(Debug)]
pub enum Stopped {
    /// The job was called off.
    CalledOff,
    /// The process stops; the next one begins anew.
    Process,
    /// It cannot be counted.
    Failed(JobProblem),
}

/// A task as it is kept.
#[derive(Serialize, Deserialize)]
struct KeptTask {
    degree_kind: String,
    every: Option<String>,
    skip_faults: bool,
    bytes: u64,
}

impl LinkListTask {
    /// The task as it is kept, for a list of `bytes` bytes of a network with degrees of this kind.
    pub(super) fn to_json(self, kind: DegreeKind, bytes: u64) -> Result<String, ServiceError> {
        let kept = KeptTask {
            degree_kind: kind_name(kind).to_owned(),
            every: self.every.map(|every| every.to_string()),
            skip_faults: self.faults == FaultPolicy::Skip,
            bytes,
        };
        serde_json::to_string(&kept).map_err(|error| ServiceError::Broken(error.to_string()))
    }
}

impl Stopped {
    /// A fault of ours.
    pub fn broken(cause: String) -> Self {
        tracing::error!(cause, "a link list could not be counted");
        Self::Failed(JobProblem::internal())
    }
}

/// Counts the list at `path` as `task` says.
pub fn count(path: &Path, task: &str, most_nodes: u64, progress: &Progress) -> Result<Told, Stopped> {
    let broken = |error: &dyn std::fmt::Display| Stopped::broken(error.to_string());
    let task: KeptTask = serde_json::from_str(task).map_err(|error| broken(&error))?;
    let every = task.every.as_deref().map(str::parse).transpose();
    let plan = LinkListPlan {
        kind: if task.degree_kind == kind_name(DegreeKind::Total) { DegreeKind::Total } else { DegreeKind::Received },
        every: every.map_err(|error: jiff::Error| broken(&error))?,
        faults: if task.skip_faults { FaultPolicy::Skip } else { FaultPolicy::Refuse },
        link_events: true,
    };
    let file = File::open(path).map_err(|error| match error.kind() {
        ErrorKind::NotFound => Stopped::Failed(JobProblem::list_missing()),
        _ => broken(&format!("{}: {error}", path.display())),
    })?;
    let mut stop = None;
    let counted = count_links(file, &plan, &mut |read| {
        if read.nodes > most_nodes {
            stop = Some(Stopped::Failed(JobProblem::too_many_nodes(most_nodes)));
            return ControlFlow::Break(());
        }
        match progress.note(READ_SHARE * read.bytes as f64 / task.bytes.max(1) as f64) {
            Ok(()) => ControlFlow::Continue(()),
            Err(why) => {
                stop = Some(match why {
                    Stop::CalledOff => Stopped::CalledOff,
                    Stop::Process => Stopped::Process,
                });
                ControlFlow::Break(())
            }
        }
    });
    let (tally, report) = counted.map_err(|error| stop.take().unwrap_or_else(|| failure(error)))?;
    told(&tally, &report).map_err(|error| broken(&error))
}

fn told(tally: &Tally, report: &LinkReport) -> Result<Told, serde_json::Error> {
    let newest = tally.snapshots.last();
    let link_events = tally.link_events.as_ref();
    let result = LinkListResult {
        lines: report.lines,
        links: report.links,
        nodes: newest.map_or(0, |snapshot| snapshot.counts.nodes()),
        snapshots: tally.snapshots.len() as u64,
        newest_snapshot: newest.map(|snapshot| date_text(snapshot.as_of)).unwrap_or_default(),
        transitions: tally.transitions.len() as u64,
        landings: link_events.map_or(0, |events| events.landings()),
        skipped: SkippedLines::of(report),
        repeats_unchecked: report.repeats_unchecked,
    };
    let derived = DerivedEvidence {
        kind: tally.kind,
        snapshots: tally.snapshots.iter().map(encode::snapshot).collect::<Result<_, _>>()?,
        transitions: tally.transitions.iter().map(encode::transitions).collect::<Result<_, _>>()?,
        link_events: link_events.map(encode::link_events).transpose()?,
    };
    Ok(Told { derived, result })
}

fn failure(error: IngestError) -> Stopped {
    const WRONG: &str = "The link list cannot be counted; errors says where and why.";
    Stopped::Failed(match error {
        IngestError::Read { .. } | IngestError::Cancelled => return Stopped::broken(error.to_string()),
        IngestError::Census { error: CensusError::Unnumbered(_) | CensusError::Inconsistent(_), .. } => {
            return Stopped::broken(error.to_string());
        }
        IngestError::Gzip { .. } | IngestError::Expanding { .. } => {
            JobProblem::invalid(format!("{error}."), Vec::new())
        }
        IngestError::Header { line, reason } => JobProblem::invalid(WRONG, vec![JobFault::in_line(line, reason)]),
        IngestError::Faulty { line, reason, .. } => {
            let detail = "The link list has a faulty line; errors says which. Mend it, or send the list with faults=skip to \
                          pass over such lines.";
            JobProblem::invalid(detail, vec![JobFault::in_line(line, reason)])
        }
        IngestError::NoLink(ref report) => JobProblem::invalid(format!("{error}."), SkippedLines::of(report).first()),
        IngestError::Census { error: too_many @ CensusError::TooManySnapshots { .. }, .. } => {
            JobProblem::invalid(WRONG, vec![JobFault::in_parameter("every", too_many.to_string())])
        }
        IngestError::Census { line, error } => {
            JobProblem::invalid(WRONG, vec![JobFault::in_line(line, error.to_string())])
        }
    })
}

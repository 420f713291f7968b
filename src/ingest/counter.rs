//! Takes links batch by batch to the census, and notes what is faulty.

use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::mpsc::{Receiver, Sender};

use foldhash::fast::RandomState;

use super::batch::{Batch, Link, bring_near};
use super::names::Names;
use super::report::{LinkFault, LinkReport, shown};
use super::{FaultPolicy, IngestError, LinkListPlan};
use crate::census::{Census, CensusError, Tally, Verdict};

/// How far counting has come, for another thread to read.
#[derive(Debug, Default)]
pub struct Counts {
    /// Links counted, but for those that wait.
    pub links: AtomicU64,
    /// Nodes met.
    pub nodes: AtomicU64,
}

/// A list as far as it was counted.
pub struct Counter {
    census: Census,
    names: Names,
    policy: FaultPolicy,
    report: LinkReport,
}

impl Counter {
    /// A list of which nothing was counted.
    pub fn new(plan: &LinkListPlan) -> Self {
        Self {
            census: Census::new(plan.kind, plan.every),
            names: Names::default(),
            policy: plan.faults,
            report: LinkReport::default(),
        }
    }

    /// What identifiers are hashed with.
    pub fn hasher(&self) -> RandomState {
        self.names.hasher()
    }

    /// Counts batches until no more come, and hands each back to be filled again.
    pub fn run(mut self, full: Receiver<Batch>, empty: Sender<Batch>, counts: &Counts) -> Result<Self, IngestError> {
        for mut batch in full {
            self.take(&mut batch)?;
            counts.links.store(self.report.links, Ordering::Relaxed);
            counts.nodes.store(self.census.nodes() as u64, Ordering::Relaxed);
            batch.clear();
            // At the end of a list nobody fills it again.
            let _ = empty.send(batch);
        }
        Ok(self)
    }

    fn take(&mut self, batch: &mut Batch) -> Result<(), IngestError> {
        batch.look_up(&self.names);
        bring_near(batch.targets().map(|target| self.census.degree(target)));
        let mut malformed = batch.malformed().iter().peekable();
        for (place, link) in batch.links().enumerate() {
            while let Some(fault) = malformed.next_if(|fault| fault.after <= place) {
                self.fault(LinkFault::Malformed, fault.line, || fault.reason.clone())?;
            }
            self.count(&link)?;
        }
        malformed.try_for_each(|fault| self.fault(LinkFault::Malformed, fault.line, || fault.reason.clone()))
    }

    /// A link that will not be counted must not number its nodes, so that numbers stay in order of arrival.
    #[inline]
    fn count(&mut self, link: &Link<'_>) -> Result<(), IngestError> {
        let Link { line, time, source, target } = *link;
        if let Some(now) = self.census.now().filter(|&now| time < now) {
            let reason =
                || format!("its time, {time}, is before that of an earlier line, {now}; sort the list by time");
            return self.fault(LinkFault::OutOfOrder, line, reason);
        }
        if source.is(&target) {
            let reason = || format!("it links {} to itself; drop it", shown(source.text));
            return self.fault(LinkFault::SelfLink, line, reason);
        }
        let verdict = source
            .number(&mut self.names)
            .zip(target.number(&mut self.names))
            .map_or(Err(CensusError::TooMany("nodes or bytes of identifiers")), |(source, target)| {
                self.census.record(time, source, target)
            });
        match verdict {
            Ok(Verdict::Counted) => {
                self.report.lines += 1;
                self.report.links += 1;
                Ok(())
            }
            Ok(Verdict::Repeated) => self.fault(LinkFault::Repeated, line, || {
                let (source, target) = (shown(source.text), shown(target.text));
                format!("it repeats the link from {source} to {target} at {time}; drop it")
            }),
            // Both were looked for above.
            Ok(Verdict::OutOfOrder) => self.fault(LinkFault::OutOfOrder, line, String::new),
            Ok(Verdict::SelfLink) => self.fault(LinkFault::SelfLink, line, String::new),
            Err(error) => Err(IngestError::Census { line, error }),
        }
    }

    #[cold]
    fn fault(&mut self, fault: LinkFault, line: u64, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        if self.policy == FaultPolicy::Refuse {
            return Err(IngestError::Faulty { line, fault, reason: reason() });
        }
        self.report.lines += 1;
        self.report.note(fault, line, reason);
        Ok(())
    }

    /// What the whole list tells, whose last line is `line`.
    pub fn finish(self, line: u64) -> Result<(Tally, LinkReport), IngestError> {
        let Self { census, mut report, .. } = self;
        report.repeats_unchecked = census.repeats_unchecked();
        match census.finish() {
            Ok(tally) => Ok((tally, report)),
            Err(CensusError::NoLink) => Err(IngestError::NoLink(Box::new(report))),
            Err(error) => Err(IngestError::Census { line, error }),
        }
    }
}

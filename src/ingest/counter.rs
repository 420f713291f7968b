//! Takes links line by line to the census, and notes what is faulty.

use jiff::Timestamp;

use super::batch::{Batch, Link, bring_near};
use super::clock::{Clock, why_no_time};
use super::names::Names;
use super::report::{LinkFault, LinkReport, shown};
use super::{FaultPolicy, IngestError, LinkListPlan, MAX_IDENTIFIER_BYTES};
use crate::census::{Census, CensusError, Tally, Verdict};

/// A list as far as it was counted.
pub struct Counter {
    census: Census,
    names: Names,
    clock: Clock,
    batch: Batch,
    policy: FaultPolicy,
    report: LinkReport,
    line: u64,
}

impl Counter {
    /// A list of which nothing was read.
    pub fn new(plan: &LinkListPlan) -> Self {
        Self {
            census: Census::new(plan.kind, plan.every),
            names: Names::default(),
            clock: Clock::default(),
            batch: Batch::default(),
            policy: plan.faults,
            report: LinkReport::default(),
            line: 0,
        }
    }

    /// The current line, from 1 on.
    pub fn line(&self) -> u64 {
        self.line
    }

    /// Links counted, but for those that wait.
    pub fn links(&self) -> u64 {
        self.report.links
    }

    /// Nodes met.
    pub fn nodes(&self) -> u64 {
        self.census.nodes() as u64
    }

    /// Goes on by so many lines.
    #[inline]
    pub fn pass(&mut self, lines: u64) {
        self.line += lines;
    }

    /// Counts a link that the current line gives as texts.
    #[inline]
    pub fn link(&mut self, time: &[u8], source: &[u8], target: &[u8]) -> Result<(), IngestError> {
        match self.clock.read(time) {
            Some(time) => self.link_at(time, source, target),
            None => self.malformed(|| why_no_time(time)),
        }
    }

    /// Counts a link of the current line.
    #[inline]
    pub fn link_at(&mut self, time: Timestamp, source: &[u8], target: &[u8]) -> Result<(), IngestError> {
        for (what, name) in [("source", source), ("target", target)] {
            if name.is_empty() || name.len() > MAX_IDENTIFIER_BYTES {
                return self.malformed(|| why_no_identifier(what, name));
            }
        }
        if self.batch.push(self.line, time, source, target, &self.names) { self.settle() } else { Ok(()) }
    }

    /// The current line cannot be read.
    #[cold]
    pub fn malformed(&mut self, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        // Those that wait come first; one of them may stop the counting.
        self.settle()?;
        self.fault(LinkFault::Malformed, self.line, reason)
    }

    /// Takes the links that wait to the census.
    pub fn settle(&mut self) -> Result<(), IngestError> {
        let mut batch = std::mem::take(&mut self.batch);
        batch.look_up(&self.names);
        bring_near(batch.targets().map(|target| self.census.degree(target)));
        batch.links().try_for_each(|link| self.count(&link))?;
        batch.clear();
        self.batch = batch;
        Ok(())
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

    /// What the whole list tells.
    pub fn finish(mut self) -> Result<(Tally, LinkReport), IngestError> {
        self.settle()?;
        let Self { census, mut report, line, .. } = self;
        report.repeats_unchecked = census.repeats_unchecked();
        match census.finish() {
            Ok(tally) => Ok((tally, report)),
            Err(CensusError::NoLink) => Err(IngestError::NoLink(Box::new(report))),
            Err(error) => Err(IngestError::Census { line, error }),
        }
    }
}

fn why_no_identifier(what: &str, name: &[u8]) -> String {
    match name {
        [] => format!("its {what} is empty"),
        _ => format!(
            "its {what}, {}, has {} bytes; an identifier has at most {MAX_IDENTIFIER_BYTES}",
            shown(name),
            name.len()
        ),
    }
}

//! Takes links line by line to the census, and notes what is faulty.

use jiff::Timestamp;

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
            policy: plan.faults,
            report: LinkReport::default(),
            line: 0,
        }
    }

    /// The current line, from 1 on.
    pub fn line(&self) -> u64 {
        self.line
    }

    /// Links counted.
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
    ///
    /// A line that will not be counted must not number its nodes, so that numbers stay in order of arrival.
    #[inline]
    pub fn link_at(&mut self, time: Timestamp, source: &[u8], target: &[u8]) -> Result<(), IngestError> {
        for (what, name) in [("source", source), ("target", target)] {
            if name.is_empty() || name.len() > MAX_IDENTIFIER_BYTES {
                return self.malformed(|| why_no_identifier(what, name));
            }
        }
        if let Some(now) = self.census.now().filter(|&now| time < now) {
            let reason =
                || format!("its time, {time}, is before that of an earlier line, {now}; sort the list by time");
            return self.fault(LinkFault::OutOfOrder, reason);
        }
        if source == target {
            return self.fault(LinkFault::SelfLink, || format!("it links {} to itself; drop it", shown(source)));
        }
        let verdict = self
            .names
            .number(source)
            .zip(self.names.number(target))
            .map_or(Err(CensusError::TooMany("nodes or bytes of identifiers")), |(source, target)| {
                self.census.record(time, source, target)
            });
        match verdict {
            Ok(Verdict::Counted) => {
                self.report.lines += 1;
                self.report.links += 1;
                Ok(())
            }
            Ok(Verdict::Repeated) => self.fault(LinkFault::Repeated, || {
                let (source, target) = (shown(source), shown(target));
                format!("it repeats the link from {source} to {target} at {time}; drop it")
            }),
            // Both were looked for above.
            Ok(Verdict::OutOfOrder) => self.fault(LinkFault::OutOfOrder, String::new),
            Ok(Verdict::SelfLink) => self.fault(LinkFault::SelfLink, String::new),
            Err(error) => Err(IngestError::Census { line: self.line, error }),
        }
    }

    /// The current line cannot be read.
    pub fn malformed(&mut self, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        self.fault(LinkFault::Malformed, reason)
    }

    #[cold]
    fn fault(&mut self, fault: LinkFault, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        if self.policy == FaultPolicy::Refuse {
            return Err(IngestError::Faulty { line: self.line, fault, reason: reason() });
        }
        self.report.lines += 1;
        self.report.note(fault, self.line, reason);
        Ok(())
    }

    /// What the whole list tells.
    pub fn finish(self) -> Result<(Tally, LinkReport), IngestError> {
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

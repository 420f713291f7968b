//! Takes links batch by batch to the census, and notes what is faulty.

use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{PoisonError, RwLock};

use super::batch::{Batch, Link, Name, bring_near};
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
    policy: FaultPolicy,
    report: LinkReport,
    /// Lines of the blocks counted.
    lines: u64,
    /// What becomes of each link of a batch.
    ends: Vec<Result<(u32, u32), LinkFault>>,
}

impl Counter {
    /// A list of which nothing was counted.
    pub fn new(plan: &LinkListPlan) -> Self {
        let census = Census::new(plan.kind, plan.every);
        Self {
            census: if plan.link_events { census } else { census.without_link_events() },
            policy: plan.faults,
            report: LinkReport::default(),
            lines: 0,
            ends: Vec::new(),
        }
    }

    /// Counts the next batch.
    pub fn take(&mut self, batch: &mut Batch, names: &RwLock<Names>, counts: &Counts) -> Result<(), IngestError> {
        self.number(batch, names)?;
        bring_near(batch.targets().map(|target| self.census.degree(target)));
        let mut malformed = batch.malformed().iter().peekable();
        let ends = std::mem::take(&mut self.ends);
        for (place, (link, &ends)) in batch.links().zip(&ends).enumerate() {
            while let Some(fault) = malformed.next_if(|fault| fault.after <= place) {
                self.fault(LinkFault::Malformed, fault.line, || fault.reason.clone())?;
            }
            self.count(&link, ends)?;
        }
        self.ends = ends;
        malformed.try_for_each(|fault| self.fault(LinkFault::Malformed, fault.line, || fault.reason.clone()))?;
        if let Some(error) = batch.end.take() {
            return Err(error.after(self.lines));
        }
        self.lines += u64::from(batch.lines);
        counts.links.store(self.report.links, Ordering::Relaxed);
        counts.nodes.store(self.census.nodes() as u64, Ordering::Relaxed);
        Ok(())
    }

    /// Gives newcomers their numbers. A link that will not be counted must not number its nodes, so that numbers stay in
    /// order of arrival; a repeated one has none that are new.
    fn number(&mut self, batch: &Batch, names: &RwLock<Names>) -> Result<(), IngestError> {
        let mut now = self.census.now();
        self.ends.clear();
        let mut newcomers = Vec::new();
        for (place, link) in batch.links().enumerate() {
            let Link { time, source, target, .. } = link;
            self.ends.push(if now.is_some_and(|now| time < now) {
                Err(LinkFault::OutOfOrder)
            } else if source.is(&target) {
                Err(LinkFault::SelfLink)
            } else {
                now = Some(time);
                let numbers = source.number.zip(target.number);
                if numbers.is_none() {
                    newcomers.push((place, link));
                }
                Ok(numbers.unwrap_or_default())
            });
        }
        // Others look up until here.
        let mut names = names.write().unwrap_or_else(PoisonError::into_inner);
        for (place, Link { line, source, target, .. }) in newcomers {
            let mut number = |name: Name<'_>| name.number.or_else(|| names.number(name.text, name.hash));
            let numbers = number(source).zip(number(target)).ok_or(IngestError::Census {
                line: self.lines + u64::from(line),
                error: CensusError::TooMany("nodes or bytes of identifiers"),
            })?;
            if let Some(ends) = self.ends.get_mut(place) {
                *ends = Ok(numbers);
            }
        }
        Ok(())
    }

    #[inline]
    fn count(&mut self, link: &Link<'_>, ends: Result<(u32, u32), LinkFault>) -> Result<(), IngestError> {
        let Link { line, time, source, target } = *link;
        let verdict = match ends {
            Ok((source, target)) => self.census.record(time, source, target),
            Err(LinkFault::SelfLink) => Ok(Verdict::SelfLink),
            Err(_) => Ok(Verdict::OutOfOrder),
        };
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
            Ok(Verdict::OutOfOrder) => {
                let now = self.census.now().unwrap_or(time);
                self.fault(LinkFault::OutOfOrder, line, || {
                    format!("its time, {time}, is before that of an earlier line, {now}; sort the list by time")
                })
            }
            Ok(Verdict::SelfLink) => {
                self.fault(LinkFault::SelfLink, line, || format!("it links {} to itself; drop it", shown(source.text)))
            }
            Err(error) => Err(IngestError::Census { line: self.lines + u64::from(line), error }),
        }
    }

    #[cold]
    fn fault(&mut self, fault: LinkFault, line: u32, reason: impl FnOnce() -> String) -> Result<(), IngestError> {
        let line = self.lines + u64::from(line);
        if self.policy == FaultPolicy::Refuse {
            return Err(IngestError::Faulty { line, fault, reason: reason() });
        }
        self.report.lines += 1;
        self.report.note(fault, line, reason);
        Ok(())
    }

    /// What the whole list tells.
    pub fn finish(self) -> Result<(Tally, LinkReport), IngestError> {
        let Self { census, mut report, lines, .. } = self;
        report.repeats_unchecked = census.repeats_unchecked();
        match census.finish() {
            Ok(tally) => Ok((tally, report)),
            Err(CensusError::NoLink) => Err(IngestError::NoLink(Box::new(report))),
            Err(error) => Err(IngestError::Census { line: lines, error }),
        }
    }
}

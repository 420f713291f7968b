//! `tally`: a link list becomes degree counts, or all the evidence that a forecast takes.

mod evidence;

use std::fs::File;
use std::io::{self, IsTerminal, Read, Write};
use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use clap::{Args, ValueEnum};
use indicatif::{ProgressBar, ProgressStyle};
use jiff::Span;

use super::{Stop, print_with};
use crate::census::Tally;
use crate::ingest::{FaultPolicy, FaultyLines, IngestError, LinkListPlan, LinkReport, count_links};
use crate::model::DegreeKind;
use evidence::EvidenceBody;

/// What to count and how to write it.
#[derive(Debug, Args)]
pub struct TallyOptions {
    /// Link list, oldest first: CSV whose header names time, source and target, or a JSON object with them a line; gzip
    /// too; - reads the standard input
    links: PathBuf,
    /// What a degree counts
    #[arg(long, value_enum, default_value_t = Kind::Received)]
    kind: Kind,
    /// Period of snapshots and transitions, such as P1M; without it there is one snapshot, at the end (for --format json)
    #[arg(long, value_name = "PERIOD", value_parser = period)]
    every: Option<Span>,
    /// What to do with lines that are malformed, out of order, repeated or link a node to itself
    #[arg(long, value_enum, default_value_t = Faults::Refuse)]
    faults: Faults,
    /// Form of the answer
    #[arg(long, value_enum, default_value_t = Form::Csv)]
    format: Form,
    /// Neither progress nor a report of skipped lines
    #[arg(long)]
    quiet: bool,
}

#[derive(Debug, Clone, Copy, ValueEnum)]
enum Kind {
    /// Links received
    Received,
    /// Links at either end
    Total,
}

#[derive(Debug, Clone, Copy, ValueEnum)]
enum Faults {
    /// Stop at the first
    Refuse,
    /// Count on without them
    Skip,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Form {
    /// degree,nodes at the end of the list
    Csv,
    /// Snapshots, transitions and link events, as POST /v1/forecasts takes them
    Json,
}

fn period(text: &str) -> Result<Span, String> {
    // The parser takes a friendlier form too; what ISO 8601 calls a duration starts with P.
    let span = text.starts_with('P').then(|| text.parse::<Span>().ok()).flatten().filter(|span| span.is_positive());
    span.ok_or_else(|| "write an ISO 8601 duration longer than nothing, P1M for a month or P30D for 30 days".into())
}

/// Counts the list and prints what it tells.
pub fn tally(options: &TallyOptions) -> Result<(), Stop> {
    if options.every.is_some() && options.format == Form::Csv {
        let message = "tailcast: --every makes snapshots, which --format csv has no room for; add --format json\n";
        return Err(Stop::Refused(message.into()));
    }
    let (tally, report) = count(options)?;
    if report.faults() > 0 || report.repeats_unchecked {
        tell(options, &report);
    }
    match options.format {
        Form::Csv => print_with(|out| degree_counts(&tally, out)),
        Form::Json => print_with(|out| {
            serde_json::to_writer(&mut *out, &EvidenceBody(&tally))?;
            out.write_all(b"\n")
        }),
    }
}

fn count(options: &TallyOptions) -> Result<(Tally, LinkReport), Stop> {
    let name = options.links.display();
    let unreadable = |error: io::Error| Stop::failed(&name.to_string(), error);
    let (input, size): (Box<dyn Read + Send>, Option<u64>) = if options.links == Path::new("-") {
        (Box::new(io::stdin()), None)
    } else {
        let file = File::open(&options.links).map_err(unreadable)?;
        let size = file.metadata().ok().filter(|about| about.is_file()).map(|about| about.len());
        (Box::new(file), size)
    };
    let plan = LinkListPlan {
        kind: match options.kind {
            Kind::Received => DegreeKind::Received,
            Kind::Total => DegreeKind::Total,
        },
        every: options.every,
        faults: match options.faults {
            Faults::Refuse => FaultPolicy::Refuse,
            Faults::Skip => FaultPolicy::Skip,
        },
        link_events: options.format == Form::Json,
    };
    let bar = if options.quiet || !io::stderr().is_terminal() { ProgressBar::hidden() } else { progress_bar(size) };
    let counted = count_links(input, &plan, &mut |progress| {
        bar.set_position(progress.bytes);
        ControlFlow::Continue(())
    });
    bar.finish_and_clear();
    counted.map_err(|error| match error {
        IngestError::Read { .. } => Stop::failed(&name.to_string(), error),
        IngestError::Faulty { .. } => {
            Stop::Refused(format!("tailcast: {name}: {error}\n  or pass over faulty lines with --faults skip\n"))
        }
        IngestError::NoLink(report) => {
            tell(options, &report);
            Stop::Refused(format!("tailcast: {name}: {}\n", IngestError::NoLink(report)))
        }
        _ => Stop::Refused(format!("tailcast: {name}: {error}\n")),
    })
}

fn progress_bar(size: Option<u64>) -> ProgressBar {
    let (bar, template) = match size {
        Some(size) => (ProgressBar::new(size), "{bar:40} {bytes} of {total_bytes}, {bytes_per_sec}, {eta} left"),
        None => (ProgressBar::no_length(), "{spinner} {bytes}, {bytes_per_sec}"),
    };
    // The template is sound; the plain bar is there all the same.
    let style = ProgressStyle::with_template(template).unwrap_or_else(|_| ProgressStyle::default_bar());
    bar.with_style(style)
}

fn degree_counts(tally: &Tally, out: &mut dyn Write) -> io::Result<()> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(out);
    writer.write_record(["degree", "nodes"])?;
    for (degree, nodes) in tally.snapshots.last().iter().flat_map(|last| last.counts.iter()) {
        writer.write_record([degree.to_string(), nodes.to_string()])?;
    }
    writer.flush()
}

/// Tells what was passed over, on the standard error stream.
fn tell(options: &TallyOptions, report: &LinkReport) {
    if options.quiet {
        return;
    }
    let mut text = format!("{}: {} lines, {} links counted\n", options.links.display(), report.lines, report.links);
    let kinds = [
        ("malformed", &report.malformed),
        ("out of order", &report.out_of_order),
        ("repeated", &report.repeated),
        ("linking a node to itself", &report.self_links),
    ];
    for (name, lines) in kinds.into_iter().filter(|(_, lines)| lines.count > 0) {
        text.push_str(&format!("  {} {name}\n", lines.count));
        text.extend(listed(lines));
    }
    if report.repeats_unchecked {
        text.push_str("  an instant has more links than can be remembered: some repeats of it may have been counted\n");
    }
    // Nothing is left to tell it to when the standard error stream is gone.
    let _ = io::stderr().write_all(text.as_bytes());
}

fn listed(lines: &FaultyLines) -> impl Iterator<Item = String> {
    let more = lines.count - lines.first.len() as u64;
    let more = (more > 0).then(|| format!("    and {more} more\n"));
    lines.first.iter().map(|(line, reason)| format!("    line {line}: {reason}\n")).chain(more)
}

//! What was found in a list.

/// Line numbers listed of each kind of fault.
pub(super) const LISTED: usize = 5;

/// Kinds of faulty lines.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LinkFault {
    /// Its time is earlier than that of the last link before it.
    OutOfOrder,
    /// An earlier line of the same time has the same source and target.
    Repeated,
    /// Source and target are the same node.
    SelfLink,
    /// It cannot be read.
    Malformed,
}

/// Faulty lines of one kind.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct FaultyLines {
    /// How many.
    pub count: u64,
    /// The first few, each with what is wrong.
    pub first: Vec<(u64, String)>,
}

/// What was found in a list.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct LinkReport {
    /// Lines with a link or a fault: all but the header and empty ones.
    pub lines: u64,
    /// Links counted.
    pub links: u64,
    /// Lines whose time is earlier than that of the last link before.
    pub out_of_order: FaultyLines,
    /// Lines that say what an earlier one of the same time says.
    pub repeated: FaultyLines,
    /// Lines that link a node to itself.
    pub self_links: FaultyLines,
    /// Lines that cannot be read.
    pub malformed: FaultyLines,
    /// Whether an instant had so many links that repeats were no longer looked for in the rest of it.
    pub repeats_unchecked: bool,
}

impl LinkReport {
    /// Faulty lines of every kind.
    pub fn faults(&self) -> u64 {
        [&self.out_of_order, &self.repeated, &self.self_links, &self.malformed].map(|lines| lines.count).iter().sum()
    }

    /// Notes a faulty line.
    pub(super) fn note(&mut self, fault: LinkFault, line: u64, reason: impl FnOnce() -> String) {
        let lines = match fault {
            LinkFault::OutOfOrder => &mut self.out_of_order,
            LinkFault::Repeated => &mut self.repeated,
            LinkFault::SelfLink => &mut self.self_links,
            LinkFault::Malformed => &mut self.malformed,
        };
        lines.count += 1;
        if lines.first.len() < LISTED {
            lines.first.push((line, reason()));
        }
    }
}

/// A text from a list as a message shows it: quoted, and cut when it is long.
pub(super) fn shown(text: &[u8]) -> String {
    const MOST_CHARS: usize = 60;
    let start = text.get(..4 * MOST_CHARS).unwrap_or(text);
    let start: String = String::from_utf8_lossy(start).chars().take(MOST_CHARS).collect();
    let more = if start.len() < text.len() { "…" } else { "" };
    format!("{start:?}{more}")
}

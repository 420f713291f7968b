//! Hands out a list block by block, to whoever reads it next.

use std::ops::ControlFlow;
use std::sync::atomic::Ordering;

use memchr::memchr;

use super::blocks::Blocks;
use super::counter::Counts;
use super::csv::{Columns, Header};
use super::intake::Intake;
use super::source::Source;
use super::{IngestError, MAX_LINE_BYTES, Progress, ndjson};

/// Is told how far the list was read, and may stop it.
pub type Watch<'w> = dyn FnMut(Progress) -> ControlFlow<()> + Send + 'w;

/// A list as far as it was handed out.
pub struct Reading<'l> {
    blocks: Blocks<'l>,
    watch: &'l mut Watch<'l>,
    counts: &'l Counts,
    format: Option<Format>,
    handed_out: u64,
    over: bool,
}

/// How the lines are written.
#[derive(Debug, Clone, Copy)]
enum Format {
    /// By columns, once the header was read.
    Csv(Option<Header>),
    Ndjson,
}

/// One of those who read.
pub struct Reader {
    /// What the block says.
    pub intake: Intake,
    block: Vec<u8>,
    format: Format,
    columns: Columns,
}

impl<'l> Reading<'l> {
    /// A list from its beginning.
    pub fn new(source: Source<'l>, watch: &'l mut Watch<'l>, counts: &'l Counts) -> Self {
        Self { blocks: Blocks::new(source), watch, counts, format: None, handed_out: 0, over: false }
    }

    /// Hands out the next block, of whole records; none at the end. Returns its place in the order of blocks.
    ///
    /// Where only reading tells whether the end of a line is that of a record, the block is read at once.
    pub fn hand_out(&mut self, reader: &mut Reader) -> Option<u64> {
        if self.over {
            return None;
        }
        if let Err(error) = self.next_block(reader) {
            reader.intake.batch.end = Some(error);
        }
        self.over |= reader.intake.batch.end.is_some();
        self.handed_out += 1;
        Some(self.handed_out - 1)
    }

    fn next_block(&mut self, reader: &mut Reader) -> Result<(), IngestError> {
        let more = self.blocks.fill().map_err(|error| self.blocks.source().fault(error))?;
        let (links, nodes) = (self.counts.links.load(Ordering::Relaxed), self.counts.nodes.load(Ordering::Relaxed));
        if (self.watch)(Progress { bytes: self.blocks.source().bytes(), links, nodes }).is_break() {
            return Err(IngestError::Cancelled);
        }
        self.over = !more;
        let unread = self.blocks.unread();
        let format = self.format.get_or_insert_with(|| Format::of(unread));
        reader.format = *format;
        if format.is_cut_by_lines(unread) {
            self.blocks.take(!more, &mut reader.block);
            if more && reader.block.is_empty() {
                self.pass_over_a_long_line(reader);
            }
            return Ok(());
        }
        let read = reader.read(unread, !more)?;
        *format = reader.format;
        self.blocks.consume(read);
        if read == 0 {
            self.pass_over_a_long_line(reader);
        }
        Ok(())
    }

    /// A buffer without the end of a record grows, up to a limit.
    fn pass_over_a_long_line(&mut self, reader: &mut Reader) {
        if self.blocks.is_full() {
            reader.intake.pass(1);
            reader.intake.malformed(|| format!("it is longer than {MAX_LINE_BYTES} bytes"));
            self.blocks.skip_line();
        }
    }
}

impl Format {
    /// The format of a list that begins so: a header does not start with a brace.
    fn of(start: &[u8]) -> Self {
        match start.trim_ascii_start().first() {
            Some(b'{') => Self::Ndjson,
            _ => Self::Csv(None),
        }
    }

    /// Whether every end of a line in `text` is that of a record.
    fn is_cut_by_lines(self, text: &[u8]) -> bool {
        match self {
            Self::Ndjson => true,
            Self::Csv(header) => header.is_some() && memchr(b'"', text).is_none(),
        }
    }
}

impl Reader {
    /// A reader without a block.
    pub fn new(intake: Intake) -> Self {
        Self { intake, block: Vec::new(), format: Format::Ndjson, columns: Columns::default() }
    }

    /// Reads the block that was handed out, if it was not read yet.
    pub fn read_block(&mut self) {
        let block = std::mem::take(&mut self.block);
        if let Err(error) = self.read(&block, true) {
            self.intake.batch.end = Some(error);
        }
        self.block = block;
        self.block.clear();
    }

    /// Takes the complete records of `text`; returns how many bytes they are.
    fn read(&mut self, text: &[u8], last: bool) -> Result<usize, IngestError> {
        match &mut self.format {
            Format::Csv(header) => {
                self.columns.header = *header;
                let read = self.columns.read(text, last, &mut self.intake);
                *header = self.columns.header;
                read
            }
            Format::Ndjson => Ok(ndjson::read(text, last, &mut self.intake)),
        }
    }
}

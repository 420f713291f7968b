//! Blocks of whole lines out of a stream, in a buffer of bounded size.

use std::io::{self, Read};

use memchr::{memchr, memrchr};

use super::MAX_LINE_BYTES;
use super::source::Source;

/// Bytes of the buffer to begin with; it grows only for a line that is longer.
const BLOCK: usize = 1 << 18;

/// A stream with what of it was read and not yet used.
pub struct Blocks<'r> {
    source: Source<'r>,
    buffer: Vec<u8>,
    /// The unread part of the buffer.
    start: usize,
    end: usize,
    /// In the middle of a line that is passed over.
    skipping: bool,
}

impl<'r> Blocks<'r> {
    /// A stream from its beginning.
    pub fn new(source: Source<'r>) -> Self {
        Self { source, buffer: vec![0; BLOCK], start: 0, end: 0, skipping: false }
    }

    /// Where the bytes come from.
    pub fn source(&self) -> &Source<'r> {
        &self.source
    }

    /// Reads on as far as the buffer reaches; false at the end of the stream.
    pub fn fill(&mut self) -> io::Result<bool> {
        loop {
            self.buffer.copy_within(self.start..self.end, 0);
            (self.start, self.end) = (0, self.end - self.start);
            if self.end == self.buffer.len() {
                self.buffer.resize((2 * self.end).min(MAX_LINE_BYTES), 0);
            }
            let more = self.read_on()?;
            if !self.skipping {
                return Ok(more);
            }
            match memchr(b'\n', self.unread()) {
                Some(line_end) => {
                    self.consume(line_end + 1);
                    self.skipping = false;
                }
                None => self.consume(self.end),
            }
            if !more {
                return Ok(false);
            }
        }
    }

    fn read_on(&mut self) -> io::Result<bool> {
        while let Some(room) = self.buffer.get_mut(self.end..).filter(|room| !room.is_empty()) {
            match self.source.read(room) {
                Ok(0) => return Ok(false),
                Ok(read) => self.end += read,
                Err(error) if error.kind() == io::ErrorKind::Interrupted => {}
                Err(error) => return Err(error),
            }
        }
        Ok(true)
    }

    /// What was read and not yet used.
    pub fn unread(&self) -> &[u8] {
        self.buffer.get(self.start..self.end).unwrap_or_default()
    }

    /// Right after [`Self::fill`]: takes the complete lines out of the buffer, and at the end of the stream all of it,
    /// in exchange for another buffer.
    pub fn take(&mut self, last: bool, block: &mut Vec<u8>) {
        let whole = if last { self.end } else { memrchr(b'\n', self.unread()).map_or(0, |line_end| line_end + 1) };
        block.resize(self.buffer.len(), 0);
        let rest = self.buffer.get(whole..self.end).unwrap_or_default();
        if let Some(room) = block.get_mut(..rest.len()) {
            room.copy_from_slice(rest);
        }
        self.end = rest.len();
        std::mem::swap(&mut self.buffer, block);
        block.truncate(whole);
    }

    /// Whether the buffer is as large as it gets and has no room left.
    pub fn is_full(&self) -> bool {
        self.start == 0 && self.end >= MAX_LINE_BYTES
    }

    /// Marks bytes as used.
    pub fn consume(&mut self, bytes: usize) {
        self.start = (self.start + bytes).min(self.end);
    }

    /// Passes over everything up to the next end of a line.
    pub fn skip_line(&mut self) {
        self.consume(self.end);
        self.skipping = true;
    }
}

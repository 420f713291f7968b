//! The bytes of a list, decompressed where need be and counted.

use std::io::{self, BufReader, Cursor, Read};
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use flate2::bufread::MultiGzDecoder;

use super::IngestError;

/// First two bytes of every gzip member (RFC 1952, section 2.3.1).
const GZIP: [u8; 2] = [0x1f, 0x8b];
/// Bytes of compressed input read at a time.
const BLOCK: usize = 1 << 16;

/// A list may expand to so many times its compressed bytes; lists of links expand to some 5 to 20 times, and deflate reaches 1,032.
pub(super) const MOST_EXPANSION: u64 = 200;
/// Bytes that any list may expand to: a short one of one line over and over is no attack.
const SPARED: u64 = 64 << 20;

/// A list's bytes.
pub struct Source<'r> {
    input: Box<dyn Read + Send + 'r>,
    bytes: Arc<AtomicU64>,
    compressed: bool,
    expanded: u64,
}

impl<'r> Source<'r> {
    /// Looks whether `input` is compressed.
    pub fn open(input: impl Read + Send + 'r) -> io::Result<Self> {
        let bytes = Arc::new(AtomicU64::new(0));
        let mut input = Counted { input, bytes: bytes.clone() };
        let mut start = Vec::new();
        input.by_ref().take(GZIP.len() as u64).read_to_end(&mut start)?;
        let compressed = start == GZIP;
        let whole = Cursor::new(start).chain(input);
        let input: Box<dyn Read + Send + 'r> = match compressed {
            true => Box::new(MultiGzDecoder::new(BufReader::with_capacity(BLOCK, whole))),
            false => Box::new(whole),
        };
        Ok(Self { input, bytes, compressed, expanded: 0 })
    }

    /// Bytes read so far, as they came.
    pub fn bytes(&self) -> u64 {
        self.bytes.load(Ordering::Relaxed)
    }

    /// Whether it goes on and on out of next to nothing.
    fn is_bomb(&self) -> bool {
        self.compressed && self.expanded > SPARED && self.expanded / MOST_EXPANSION > self.bytes()
    }

    /// A failure to read on, in the words that fit; after which line is not known here.
    pub fn fault(&self, error: io::Error) -> IngestError {
        let line = 0;
        match self.compressed {
            true if self.is_bomb() => IngestError::Expanding { line },
            true => IngestError::Gzip { line, error },
            false => IngestError::Read { line, error },
        }
    }
}

impl Read for Source<'_> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let read = self.input.read(buffer)?;
        self.expanded += read as u64;
        if self.is_bomb() { Err(io::ErrorKind::InvalidData.into()) } else { Ok(read) }
    }
}

struct Counted<R> {
    input: R,
    bytes: Arc<AtomicU64>,
}

impl<R: Read> Read for Counted<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let read = self.input.read(buffer)?;
        self.bytes.fetch_add(read as u64, Ordering::Relaxed);
        Ok(read)
    }
}

//! CSV lists (RFC 4180).

use csv_core::{ReadRecordResult, Reader, ReaderBuilder, Terminator};
use memchr::{memchr, memchr_iter, memchr3_iter};

use super::intake::Intake;
use super::report::shown;
use super::{IngestError, MAX_LINE_BYTES};

/// What a list's columns are called.
const NAMES: [&str; 3] = ["time", "source", "target"];
/// What some editors begin a text with.
const BYTE_ORDER_MARK: &[u8] = b"\xef\xbb\xbf";
/// Most columns of a list.
const MOST_COLUMNS: usize = 1_000;

/// Reads lines by columns; the first line says which is which.
#[derive(Default)]
pub struct Columns {
    /// Once it was read.
    pub header: Option<Header>,
    /// Places of the commas of the current line.
    commas: Vec<usize>,
    unquoted: Unquoted,
}

/// Which column is which.
#[derive(Debug, Clone, Copy)]
pub struct Header {
    /// Columns of time, source and target.
    places: [usize; 3],
    width: usize,
}

/// Where a record ends.
enum End {
    /// With the list; no quotes are in it.
    Plain,
    /// Its text without the end of the line, and with it; it has quotes to take off.
    Quoted(usize, usize),
    /// A quote is not closed.
    Open,
    /// More bytes are needed.
    Beyond,
}

impl Columns {
    /// Takes the complete lines of `block`; returns how many bytes they are.
    pub fn read(&mut self, block: &[u8], last: bool, intake: &mut Intake) -> Result<usize, IngestError> {
        let mut at = 0;
        while let Some(rest) = block.get(at..).filter(|rest| !rest.is_empty()) {
            let plain = self.plain_lines(rest, intake)?;
            at += plain;
            let Some(rest) = rest.get(plain..).filter(|rest| !rest.is_empty()) else { break };
            let full = at == 0 && block.len() >= MAX_LINE_BYTES;
            at += match end(rest, last, full) {
                End::Plain => {
                    self.commas.clear();
                    self.commas.extend(memchr_iter(b',', rest));
                    intake.pass(1);
                    self.plain(rest, intake)?;
                    rest.len()
                }
                End::Quoted(text, line) => self.quoted(rest, text, line, intake)?,
                End::Open => {
                    intake.pass(1);
                    intake.malformed(|| "a double quote opens a field and none closes it".into());
                    memchr(b'\n', rest).map_or(rest.len(), |line_end| line_end + 1)
                }
                End::Beyond => return Ok(at),
            };
        }
        Ok(at)
    }

    /// Takes the lines up to the first that has a quote or no end, in one pass; returns how many bytes they are.
    fn plain_lines(&mut self, text: &[u8], intake: &mut Intake) -> Result<usize, IngestError> {
        let mut start = 0;
        self.commas.clear();
        for place in memchr3_iter(b',', b'\n', b'"', text) {
            match text.get(place) {
                Some(b',') => self.commas.push(place - start),
                Some(b'\n') => {
                    intake.pass(1);
                    self.plain(text.get(start..place).unwrap_or_default(), intake)?;
                    self.commas.clear();
                    start = place + 1;
                }
                _ => break,
            }
        }
        Ok(start)
    }

    #[inline]
    fn plain(&mut self, line: &[u8], intake: &mut Intake) -> Result<(), IngestError> {
        let line = line.strip_suffix(b"\r").unwrap_or(line);
        let Some(header) = &self.header else {
            let line = line.strip_prefix(BYTE_ORDER_MARK).unwrap_or(line);
            self.header = Header::read(line.split(|&byte| byte == b','), line.is_empty(), intake.batch.lines)?;
            return Ok(());
        };
        if line.is_empty() {
            return Ok(());
        }
        if self.commas.len() + 1 != header.width {
            intake.malformed(|| wrong_width(self.commas.len() + 1, header.width));
            return Ok(());
        }
        let field = |column: usize| {
            let start = column.checked_sub(1).and_then(|before| self.commas.get(before)).map_or(0, |comma| comma + 1);
            let end = self.commas.get(column).copied().unwrap_or(line.len());
            line.get(start..end).unwrap_or_default()
        };
        let [time, source, target] = header.places.map(field);
        intake.link(time, source, target);
        Ok(())
    }

    /// Takes a record with quotes; returns how many bytes it is.
    fn quoted(&mut self, rest: &[u8], text: usize, line: usize, intake: &mut Intake) -> Result<usize, IngestError> {
        intake.pass(1);
        let record = rest.get(..text).unwrap_or_default();
        let fields = self.unquoted.read(record.strip_prefix(BYTE_ORDER_MARK).unwrap_or(record));
        let Some(header) = &self.header else {
            let fields: Vec<&[u8]> = fields.collect();
            self.header = Header::read(fields.into_iter(), false, intake.batch.lines)?;
            return Ok(line);
        };
        let width = fields.clone().count();
        if width != header.width {
            intake.malformed(|| wrong_width(width, header.width));
            // A quote too many has swallowed the lines that follow; they may be sound.
            return Ok(memchr(b'\n', record).map_or(line, |line_end| line_end + 1));
        }
        let [time, source, target] = header.places.map(|column| fields.clone().nth(column).unwrap_or_default());
        intake.link(time, source, target);
        intake.pass(memchr_iter(b'\n', record).count() as u32);
        Ok(line)
    }
}

/// The end of a record that has a quote or no end of a line: the first end of a line outside of quotes.
/// `full`: no more bytes can follow.
fn end(text: &[u8], last: bool, full: bool) -> End {
    let mut quotes = 0u64;
    for place in memchr::memchr2_iter(b'\n', b'"', text) {
        match text.get(place) {
            Some(b'"') => quotes += 1,
            _ if quotes.is_multiple_of(2) => return End::Quoted(place, place + 1),
            _ => {}
        }
    }
    match (last, full) {
        (true, _) if quotes == 0 => End::Plain,
        (true, _) if quotes.is_multiple_of(2) => End::Quoted(text.len(), text.len()),
        (true, _) => End::Open,
        (false, true) if memchr(b'\n', text).is_some() => End::Open,
        _ => End::Beyond,
    }
}

fn wrong_width(found: usize, header: usize) -> String {
    let fields = if found == 1 { "1 field".to_owned() } else { format!("{found} fields") };
    format!("it has {fields} where the header has {header}; quote a field that holds a comma")
}

impl Header {
    /// Finds the columns; none in an empty line.
    fn read<'f>(
        fields: impl Iterator<Item = &'f [u8]> + Clone,
        empty: bool,
        line: u32,
    ) -> Result<Option<Self>, IngestError> {
        if empty {
            return Ok(None);
        }
        let wrong = |reason: String| Err(IngestError::Header { line: line.into(), reason });
        let width = fields.clone().count();
        if width > MOST_COLUMNS {
            return wrong(format!("the header has {width} columns; at most {MOST_COLUMNS} are taken"));
        }
        let mut places = [0; 3];
        for (place, name) in places.iter_mut().zip(NAMES) {
            let mut found = fields.clone().enumerate().filter(|(_, field)| *field == name.as_bytes());
            match (found.next(), found.next()) {
                (Some((column, _)), None) => *place = column,
                (Some(_), Some(_)) => return wrong(format!("the header names the column {name} twice")),
                (None, _) => {
                    let first: Vec<String> = fields.clone().take(6).map(shown).collect();
                    return wrong(format!(
                        "the header has no column {name}, but {}; the first line of a list names its columns, {} among \
                         them",
                        first.join(", "),
                        NAMES.join(", ")
                    ));
                }
            }
        }
        Ok(Some(Self { places, width }))
    }
}

/// Takes the quotes off the fields of a record.
struct Unquoted {
    reader: Reader,
    text: Vec<u8>,
    ends: Vec<usize>,
}

impl Default for Unquoted {
    fn default() -> Self {
        let reader = ReaderBuilder::new().terminator(Terminator::Any(b'\n')).build();
        Self { reader, text: Vec::new(), ends: Vec::new() }
    }
}

impl Unquoted {
    /// The fields of one record, which has no end of a line outside of quotes.
    fn read(&mut self, record: &[u8]) -> impl Iterator<Item = &[u8]> + Clone {
        let record = record.strip_suffix(b"\r").unwrap_or(record);
        self.reader.reset();
        // Quotes are only taken off, so the fields are no longer than the record; each but the first has a comma.
        self.text.resize(record.len(), 0);
        self.ends.resize(record.len() + 1, 0);
        let (_, read, written, ends) = self.reader.read_record(record, &mut self.text, &mut self.ends);
        let rest = record.get(read..).unwrap_or_default();
        let (text, more) = (self.text.get_mut(written..).unwrap_or_default(), self.ends.get_mut(ends..));
        // An empty input says that the record ends here.
        let (result, _, _, last) = self.reader.read_record(rest, text, more.unwrap_or_default());
        let ends = if result == ReadRecordResult::Record { ends + last } else { ends };
        let starts = std::iter::once(0).chain(self.ends.iter().copied());
        let text = &self.text;
        starts.zip(&self.ends).take(ends).map(|(start, &end)| text.get(start..end).unwrap_or_default())
    }
}

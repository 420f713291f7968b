//! Degree counts and transitions as CSV (RFC 4180): a header, then a row of whole numbers each.

use csv::{ByteRecord, ReaderBuilder};

use super::Faults;
use super::number::whole_from_float;
use crate::model::{DegreeCounts, Move};

/// Rows with the lines they stand in.
type Rows<const WIDTH: usize> = Vec<([Option<u64>; WIDTH], u64)>;

/// `degree,nodes` rows, at most `most`.
pub fn degree_counts_csv(bytes: &[u8], most: usize, faults: &mut Faults) -> Option<DegreeCounts> {
    let rows = rows(bytes, ["degree", "nodes"], 0, most, faults)?;
    let pairs: Vec<(u64, u64)> = rows.iter().filter_map(|&([degree, nodes], _)| degree.zip(nodes)).collect();
    let found = DegreeCounts::from_pairs(&pairs);
    for fault in found.as_ref().err().into_iter().flatten() {
        faults.add_line(line_of(&rows, fault.index), fault.to_string());
    }
    found.ok()
}

/// `degree_before,degree_after,nodes` rows with the lines they stand in, at most `most`; blank before: arrived since,
/// blank after: departed.
pub fn moves_csv(bytes: &[u8], most: usize, faults: &mut Faults) -> Option<(Vec<Move>, Vec<u64>)> {
    let rows = rows(bytes, ["degree_before", "degree_after", "nodes"], 2, most, faults)?;
    let moves = rows.iter().filter_map(|&([before, after, nodes], _)| Some(Move { before, after, nodes: nodes? }));
    Some((moves.collect(), rows.iter().map(|&(_, line)| line).collect()))
}

fn line_of<const WIDTH: usize>(rows: &Rows<WIDTH>, index: Option<usize>) -> u64 {
    index.and_then(|index| rows.get(index)).map_or(1, |&(_, line)| line)
}

/// The rows below a header of `names`; the first `blanks` cells of a row may be blank.
fn rows<const WIDTH: usize>(
    bytes: &[u8],
    names: [&str; WIDTH],
    blanks: usize,
    most: usize,
    faults: &mut Faults,
) -> Option<Rows<WIDTH>> {
    // Spreadsheets put a byte order mark in front.
    let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    let mut reader = ReaderBuilder::new().has_headers(false).flexible(true).from_reader(bytes);
    let mut record = ByteRecord::new();
    let mut lines = Lines::of(bytes);
    let (mut rows, mut sound, mut headed) = (Vec::new(), true, false);
    loop {
        match reader.read_byte_record(&mut record) {
            Ok(true) => {}
            Ok(false) => break,
            Err(error) => {
                faults.add_line(lines.at(reader.position().byte()), format!("this is not CSV: {error}"));
                return None;
            }
        }
        let line = lines.at(record.position().map_or(0, csv::Position::byte));
        if !headed {
            if !record.iter().map(<[u8]>::trim_ascii).eq(names.iter().map(|name| name.as_bytes())) {
                faults.add_line(line, format!("the first line must be the header {}", names.join(",")));
                return None;
            }
            headed = true;
        } else if rows.len() == most {
            faults.add_line(line, format!("there are more than the {most} rows that are taken here"));
            return None;
        } else if let Some(cells) = cells(&record, names, blanks, line, faults) {
            rows.push((cells, line));
        } else {
            sound = false;
        }
    }
    if !headed {
        faults.add_line(1, format!("the body is empty; it must start with the header {}", names.join(",")));
    }
    (headed && sound).then_some(rows)
}

/// Counts lines. The reader's own count is behind after blank lines, which it passes over when it reads on.
pub(super) struct Lines<'b> {
    bytes: &'b [u8],
    counted: usize,
    line: u64,
}

impl<'b> Lines<'b> {
    /// Counts from the first line on.
    pub(super) fn of(bytes: &'b [u8]) -> Self {
        Self { bytes, counted: 0, line: 1 }
    }

    /// The line of the record that is read from `offset` on; offsets never go back.
    pub(super) fn at(&mut self, offset: u64) -> u64 {
        let rest = self.bytes.get(self.counted..).unwrap_or_default();
        let ahead = usize::try_from(offset).unwrap_or(usize::MAX).saturating_sub(self.counted).min(rest.len());
        let (before, from) = rest.split_at(ahead);
        let blank = from.iter().take_while(|byte| b"\r\n".contains(byte)).count();
        let ends = before.iter().chain(from.iter().take(blank)).filter(|&&byte| byte == b'\n').count();
        self.line += ends as u64;
        self.counted += ahead + blank;
        self.line
    }
}

fn cells<const WIDTH: usize>(
    record: &ByteRecord,
    names: [&str; WIDTH],
    blanks: usize,
    line: u64,
    faults: &mut Faults,
) -> Option<[Option<u64>; WIDTH]> {
    if record.len() != WIDTH {
        let detail = format!("a row has {WIDTH} cells ({}), not {}", names.join(", "), record.len());
        faults.add_line(line, detail);
        return None;
    }
    let (mut cells, mut sound) = ([None; WIDTH], true);
    for (index, ((slot, cell), name)) in cells.iter_mut().zip(record).zip(names).enumerate() {
        let cell = cell.trim_ascii();
        if cell.is_empty() && index < blanks {
            continue;
        }
        *slot = whole(cell);
        if slot.is_none() {
            sound = false;
            let shown: String = String::from_utf8_lossy(cell).chars().take(40).collect();
            faults.add_line(line, format!("{name} is {shown:?}, not a whole number from 0 to 2^64 - 1"));
        }
    }
    sound.then_some(cells)
}

/// A whole number in any spelling that JSON has for it too.
fn whole(cell: &[u8]) -> Option<u64> {
    let text = std::str::from_utf8(cell).ok()?;
    if !text.starts_with(|first: char| first.is_ascii_digit() || first == '-') {
        return None;
    }
    text.parse().ok().or_else(|| {
        // Digits alone that did not parse are beyond the range.
        let digits = text.bytes().all(|byte| byte.is_ascii_digit());
        if digits { None } else { whole_from_float(text.parse().ok()?) }
    })
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;
    use crate::api::decode::{Fault, Place};
    use crate::model::MAX_DEGREE;
    use crate::report;

    fn lines(faults: Faults) -> Vec<(u64, String)> {
        let line = |fault: Fault| match fault.place {
            Place::Line(line) => (line, fault.detail),
            other => panic!("{other:?}"),
        };
        faults.into_parts().0.into_iter().map(line).collect()
    }

    fn counts(text: &str) -> Result<DegreeCounts, Vec<(u64, String)>> {
        let mut faults = Faults::default();
        degree_counts_csv(text.as_bytes(), 3, &mut faults).ok_or_else(|| lines(faults))
    }

    #[test]
    fn counts_read_as_from_json() {
        let expected = DegreeCounts::from_pairs(&[(0, 5), (2, 10)]).unwrap();
        for text in [
            "degree,nodes\n0,5\n2,10\n",
            "\u{feff}degree,nodes\r\n2,10\r\n0,5",
            "degree , nodes\n\"2\",1e1\n 0 ,5.0\n7,0\n",
        ] {
            assert_eq!(counts(text).unwrap(), expected, "{text}");
        }
    }

    #[test]
    fn every_fault_has_its_line() {
        for (text, line, words) in [
            ("", 1, "empty"),
            ("nodes,degree\n1,2\n", 1, "must be the header degree,nodes"),
            ("0,5\n", 1, "header"),
            ("degree,nodes\n", 1, "no degree has a node"),
            ("degree,nodes\n0,5\n0,6\n", 3, "twice"),
            ("degree,nodes\n0,5\n9007199254740992,6\n", 3, "largest allowed"),
            ("degree,nodes\n0,18446744073709551616\n", 2, "2^64 - 1"),
            ("degree,nodes\n0,5\n1,2\n2,2\n3,2\n", 5, "more than the 3"),
            ("degree,nodes\n0,5,6\n", 2, "2 cells"),
            ("degree,nodes\n0,\n", 2, "nodes is \"\""),
        ] {
            let faults = counts(text).unwrap_err();
            assert!(faults.len() == 1 && faults[0].0 == line && faults[0].1.contains(words), "{text}: {faults:?}");
        }
        let found: Vec<u64> =
            counts("degree,nodes\n-1,5\n0.5,x\n1,NaN\n").unwrap_err().into_iter().map(|(line, _)| line).collect();
        assert_eq!(found, [2, 3, 3, 4]);
    }

    #[test]
    fn a_blank_stands_for_a_node_that_was_not_there() {
        let mut faults = Faults::default();
        let text = "\ndegree_before,degree_after,nodes\n,0,20\n3,,2\n\n0,1,7\n";
        let (moves, at) = moves_csv(text.as_bytes(), 9, &mut faults).unwrap();
        let row = |before, after, nodes| Move { before, after, nodes };
        assert_eq!(moves, [row(None, Some(0), 20), row(Some(3), None, 2), row(Some(0), Some(1), 7)]);
        assert_eq!(at, [3, 4, 6]);
        let with_returns = text.replace('\n', "\r\n");
        assert_eq!(moves_csv(with_returns.as_bytes(), 9, &mut faults).unwrap(), (moves, at));
        assert!(moves_csv(b"degree_before,degree_after,nodes\n1,2,\n", 9, &mut faults).is_none());
        assert_eq!(lines(faults), [(2, "nodes is \"\", not a whole number from 0 to 2^64 - 1".to_owned())]);
    }

    proptest! {
        #![proptest_config(ProptestConfig { cases: 500, failure_persistence: None, ..ProptestConfig::default() })]

        /// Whatever comes ends in rows or in faults.
        #[test]
        fn any_bytes(bytes in prop::collection::vec(prop::sample::select(b"09,\n\r\" -.e\x00\xff".to_vec()), 0..60)) {
            for head in ["", "degree,nodes\n", "degree_before,degree_after,nodes\n"] {
                let text = [head.as_bytes(), &bytes].concat();
                let mut faults = Faults::default();
                let counted = degree_counts_csv(&text, 5, &mut faults).is_some();
                prop_assert!(counted == faults.is_empty());
                let mut faults = Faults::default();
                let read = moves_csv(&text, 5, &mut faults).is_some();
                prop_assert!(read == faults.is_empty());
                let lines = text.iter().filter(|&&byte| byte == b'\n').count() as u64 + 1;
                prop_assert!(self::lines(faults).iter().all(|&(line, _)| (1..=lines).contains(&line)));
            }
        }

        /// What is answered as CSV is taken as CSV.
        #[test]
        fn answers_are_taken_back(pairs in prop::collection::btree_map(0..=MAX_DEGREE, 1..u64::MAX >> 8, 1..20)) {
            let pairs: Vec<(u64, u64)> = pairs.into_iter().collect();
            let mut faults = Faults::default();
            let counts = degree_counts_csv(report::degree_counts_csv(&pairs).as_bytes(), 20, &mut faults);
            prop_assert_eq!(counts, DegreeCounts::from_pairs(&pairs).ok());
        }
    }
}

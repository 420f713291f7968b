//! A table of planned arrivals as it leaves a spreadsheet: a header, then a segment a row.

use csv::{ReaderBuilder, StringRecord};

use super::csv::Lines;
use super::{At, Faults, instant_of, unknown_name};
use crate::model::StandingSegment;

/// Columns in any order; the first two are needed.
const COLUMNS: [&str; 3] = ["from", "per_day", "growth_per_year"];
const NEEDED: usize = 2;
/// Most rows; a plan of so many segments is refused for its pieces anyway.
const MOST_ROWS: usize = 1_000;
/// What may separate cells; commas where the header has none of the others.
const OTHER_DELIMITERS: [char; 2] = ['\t', ';'];

/// The segments of a table given as a string, and the line of each.
pub fn segments_csv(text: &str, at: At<'_>, faults: &mut Faults) -> Option<(Vec<StandingSegment>, Vec<u64>)> {
    // Spreadsheets put a byte order mark in front.
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    let header = text.lines().find(|line| !line.is_empty()).unwrap_or_default();
    let delimiter = OTHER_DELIMITERS.into_iter().find(|&delimiter| header.contains(delimiter)).unwrap_or(',');
    let delimiter = u8::try_from(delimiter).unwrap_or(b',');
    let mut reader =
        ReaderBuilder::new().has_headers(false).flexible(true).delimiter(delimiter).from_reader(text.as_bytes());
    let mut lines = Lines::of(text.as_bytes());
    let mut record = StringRecord::new();
    let (mut segments, mut at_lines, mut sound) = (Vec::new(), Vec::new(), true);
    let mut columns = None;
    loop {
        match reader.read_record(&mut record) {
            Ok(true) => {}
            Ok(false) => break,
            Err(error) => {
                faults.add(&at, format!("line {}: this is not CSV: {error}", lines.at(reader.position().byte())));
                return None;
            }
        }
        let line = lines.at(record.position().map_or(0, csv::Position::byte));
        let Some(columns) = &columns else {
            columns = Some(header_of(&record, line, at, faults)?);
            continue;
        };
        if record.iter().all(|cell| cell.trim().is_empty()) {
            continue;
        }
        if segments.len() == MOST_ROWS {
            faults.add(&at, format!("line {line}: there are more than the {MOST_ROWS} rows that are taken here"));
            return None;
        }
        match segment(&record, columns, line, at, faults) {
            Some(segment) => {
                segments.push(segment);
                at_lines.push(line);
            }
            None => sound = false,
        }
    }
    if columns.is_none() {
        faults.add(&at, "the table is empty; it must start with the header from,per_day (and growth_per_year)");
    }
    (columns.is_some() && sound).then_some((segments, at_lines))
}

/// For each column of the table, which of [`COLUMNS`] it is.
fn header_of(record: &StringRecord, line: u64, at: At<'_>, faults: &mut Faults) -> Option<Vec<usize>> {
    let mut columns = Vec::new();
    let mut sound = true;
    for name in record.iter().map(str::trim) {
        match COLUMNS.iter().position(|&known| known == name) {
            Some(column) if columns.contains(&column) => {
                faults.add(&at, format!("line {line}: the column {name:?} is given twice"));
                sound = false;
            }
            Some(column) => columns.push(column),
            None => {
                faults.add(&at, format!("line {line}: {}", unknown_name("column", name, &COLUMNS)));
                sound = false;
            }
        }
    }
    for (_, name) in COLUMNS.iter().enumerate().take(NEEDED).filter(|(column, _)| !columns.contains(column)) {
        faults.add(
            &at,
            format!("line {line}: the header has no column {name:?}; it must be from,per_day (and growth_per_year)"),
        );
        sound = false;
    }
    sound.then_some(columns)
}

fn segment(
    record: &StringRecord,
    columns: &[usize],
    line: u64,
    at: At<'_>,
    faults: &mut Faults,
) -> Option<StandingSegment> {
    if record.iter().skip(columns.len()).any(|cell| !cell.trim().is_empty()) {
        let detail = format!("line {line}: the row has {} cells, the header has {}", record.len(), columns.len());
        faults.add(&at, detail);
        return None;
    }
    let cell = |name: &str| {
        let index = columns.iter().position(|&column| COLUMNS.get(column) == Some(&name))?;
        record.get(index).map(str::trim).filter(|cell| !cell.is_empty())
    };
    let mut number = |name: &'static str, blank: Option<f64>| {
        let Some(text) = cell(name) else {
            if blank.is_none() {
                faults.add(&at, format!("line {line}: {name} is missing"));
            }
            return blank;
        };
        let plain = text.starts_with(|first: char| first.is_ascii_digit() || "-+.".contains(first));
        let value = text.parse::<f64>().ok().filter(|value| plain && value.is_finite());
        if value.is_none() {
            let shown: String = text.chars().take(40).collect();
            faults.add(&at, format!("line {line}: {name} is {shown:?}, not a number such as 42.5"));
        }
        // Zero has one spelling.
        value.map(|value| value + 0.0)
    };
    let (per_day, growth_per_year) = (number("per_day", None), number("growth_per_year", Some(0.0)));
    let from = match cell("from").map(instant_of) {
        Some(Ok(from)) => Some(from),
        Some(Err(detail)) => {
            faults.add(&at, format!("line {line}: from {detail}"));
            None
        }
        None => {
            faults.add(&at, format!("line {line}: from is missing"));
            None
        }
    };
    Some(StandingSegment { from: Some(from?), per_day: per_day?, growth_per_year: growth_per_year? })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Result<(Vec<StandingSegment>, Vec<u64>), Vec<String>> {
        let mut faults = Faults::default();
        let found = segments_csv(text, At::ROOT.field("csv"), &mut faults);
        found.ok_or_else(|| faults.into_parts().0.into_iter().map(|fault| fault.detail).collect())
    }

    #[test]
    fn a_table_reads_the_same_from_any_spreadsheet() {
        let plain = read("from,per_day,growth_per_year\n2026-06-01,40,0.2\n2026-09-01,55.5,\n").unwrap();
        assert_eq!(plain.1, [2, 3]);
        assert_eq!((plain.0[1].per_day, plain.0[1].growth_per_year), (55.5, 0.0));
        for text in [
            "\u{feff}growth_per_year;per_day;from\r\n0.2;40;2026-06-01\r\n;55.5;2026-09-01\r\n;;\r\n",
            " from\tper_day\tgrowth_per_year\n2026-06-01T00:00:00Z\t4e1\t.2\n2026-09-01\t55.5",
        ] {
            assert_eq!(read(text).unwrap(), plain, "{text}");
        }
        assert_eq!(read("from,per_day\n2026-06-01,-0\n").unwrap().0[0].per_day.to_bits(), 0);
    }

    #[test]
    fn every_fault_has_its_line() {
        for (text, words) in [
            ("", "empty"),
            ("from\n2026-06-01\n", "line 1: the header has no column \"per_day\""),
            ("from,per_dya\n", "line 1: there is no column \"per_dya\"; did you mean \"per_day\"?"),
            ("from,per_day,from\n", "line 1: the column \"from\" is given twice"),
            ("from,per_day\n2026-06-01,40\n2026-02-30,5\n", "line 3: from \"2026-02-30\" is no time"),
            ("from,per_day\n\n2026-06-01,\"4,5\"\n", "line 3: per_day is \"4,5\""),
            ("from,per_day\n2026-06-01,inf\n", "line 2: per_day is \"inf\""),
            ("from,per_day\n2026-06-01\n", "line 2: per_day is missing"),
            ("from,per_day\n2026-06-01,4,5\n", "line 2: the row has 3 cells"),
        ] {
            let faults = read(text).unwrap_err();
            assert!(faults.iter().any(|fault| fault.contains(words)), "{text}: {faults:?}");
        }
        let faults = read("from,per_day\nsoon,x\n").unwrap_err();
        assert_eq!(faults.len(), 2);
        let long = format!("from,per_day\n{}", "2026-06-01,1\n".repeat(1_001));
        assert!(read(&long).unwrap_err()[0].starts_with("line 1002: there are more than"));
    }
}

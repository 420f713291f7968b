//! Degree counts and transitions.

use serde_json::value::RawValue;

use super::rows::{Rows, Whole, rows};
use super::{At, Faults, whole};
use crate::model::{DegreeCounts, MAX_DEGREE, Move};

const PAIRS: Rows =
    Rows { one: "a [degree, nodes] pair", cells: "numbers", several: "pairs", holder: "one snapshot may have" };

const MOVES: Rows = Rows {
    one: "a [degree before, degree after, nodes] row",
    cells: "entries",
    several: "rows",
    holder: "one table of transitions may have",
};

/// `[[degree, nodes], …]`, at most `most` pairs.
pub fn degree_counts(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<DegreeCounts> {
    let pairs = rows(
        raw,
        at,
        (&PAIRS, most),
        faults,
        |(Whole(degree), Whole(nodes))| Some((degree, nodes)),
        |[degree, nodes], at, faults| {
            let degree = whole(degree, at.item(0), MAX_DEGREE, faults);
            degree.zip(whole(nodes, at.item(1), u64::MAX, faults))
        },
    )?;
    let found = DegreeCounts::from_pairs(&pairs);
    for fault in found.as_ref().err().into_iter().flatten() {
        let detail = fault.to_string();
        match fault.index {
            Some(index) => faults.add(&at.item(index), detail),
            None => faults.add(&at, detail),
        }
    }
    found.ok()
}

/// `[[degree before | null, degree after | null, nodes], …]`, at most `most` rows.
pub fn moves(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<Vec<Move>> {
    type Plain = (Option<Whole>, Option<Whole>, Whole);
    let plain = |(before, after, Whole(nodes)): Plain| {
        let degree = |blank: Option<Whole>| blank.map(|Whole(degree)| degree);
        Some(Move { before: degree(before), after: degree(after), nodes })
    };
    rows(raw, at, (&MOVES, most), faults, plain, |[before, after, nodes], at, faults| {
        let before = degree_or_blank(before, at.item(0), faults);
        let after = degree_or_blank(after, at.item(1), faults);
        let nodes = whole(nodes, at.item(2), u64::MAX, faults);
        Some(Move { before: before?, after: after?, nodes: nodes? })
    })
}

/// A degree, or null for a node that was not there.
fn degree_or_blank(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Option<u64>> {
    if raw.get() == "null" { Some(None) } else { whole(raw, at, MAX_DEGREE, faults).map(Some) }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::api::decode::Place;

    fn read(text: &str, most: usize) -> Result<DegreeCounts, Vec<(String, String)>> {
        let mut faults = Faults::default();
        let counts = degree_counts(serde_json::from_str(text).unwrap(), At::ROOT, most, &mut faults);
        counts.ok_or_else(|| {
            let place = |place| if let Place::Body(pointer) = place { pointer } else { String::new() };
            faults.into_parts().0.into_iter().map(|fault| (place(fault.place), fault.detail)).collect()
        })
    }

    #[test]
    fn both_ways_read_the_same() {
        let counts = read("[[0, 5], [2.0, 1e1]]", 9).unwrap();
        assert_eq!(counts, DegreeCounts::from_pairs(&[(0, 5), (2, 10)]).unwrap());
        assert_eq!(read("[[0, 5], [2, -0]]", 9).unwrap(), DegreeCounts::from_pairs(&[(0, 5)]).unwrap());
    }

    #[test]
    fn every_fault_has_its_place() {
        let faults = read(r#"[[0, 5], [1.5, -1], "x", [3], [4, 1e400], [5, null], [1, 2, 3]]"#, 9).unwrap_err();
        let places: Vec<&str> = faults.iter().map(|(place, _)| place.as_str()).collect();
        assert_eq!(places, ["/1/0", "/1/1", "/2", "/3", "/4/1", "/5/1", "/6"]);
    }

    #[test]
    fn faults_of_the_whole_list_have_the_lists_place() {
        for (text, place, words) in [
            ("[]", "", "no degree has a node"),
            ("[[3, 0]]", "", "no degree has a node"),
            ("[[1, 2], [1, 3]]", "/1", "given twice"),
            ("[[9007199254740992, 1]]", "/0", "largest allowed"),
            ("[[0, 18446744073709551615], [1, 1]]", "", "2^64 - 1"),
            ("[[0, 1], [1, 1], [2, 1], [3, 1]]", "", "more than the 3"),
            ("{}", "", "an array is wanted"),
        ] {
            let faults = read(text, 3).unwrap_err();
            assert!(faults.len() == 1 && faults[0].0 == place && faults[0].1.contains(words), "{text}: {faults:?}");
        }
    }

    fn read_moves(text: &str) -> Result<Vec<Move>, Vec<Place>> {
        let mut faults = Faults::default();
        let moves = moves(serde_json::from_str(text).unwrap(), At::ROOT, 4, &mut faults);
        moves.ok_or_else(|| faults.into_parts().0.into_iter().map(|fault| fault.place).collect())
    }

    #[test]
    fn a_blank_is_a_null_and_stands_in_the_first_two_places_alone() {
        let (before, after, nodes) = (None, Some(1), 7);
        assert_eq!(read_moves("[[null, 1.0, 7]]"), Ok(vec![Move { before, after, nodes }]));
        assert_eq!(read_moves("[[3, null, 2e0]]"), Ok(vec![Move { before: Some(3), after: None, nodes: 2 }]));
        let at = |pointers: &[&str]| Err(pointers.iter().map(|&at| Place::Body(at.to_owned())).collect());
        assert_eq!(read_moves("[[0, 1, null], [1, 2], [\"\", 2, 1], null]"), at(&["/0/2", "/1", "/2/0", "/3"]));
        assert_eq!(read_moves("[[0,1,1],[0,2,1],[0,3,1],[0,4,1],[0,5,1]]"), at(&[""]));
    }
}

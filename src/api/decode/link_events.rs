//! Attachment statistics of a link list.

use serde_json::value::RawValue;

use super::rows::{Rows, Whole, rows};
use super::{At, Faults, list, object, real, whole};
use crate::model::{AttachmentCell, AttachmentWindow, LinkEvents, MAX_DEGREE, RatioClass};

const RATIOS: Rows = Rows {
    one: "a [ratio, variance, landings] row",
    cells: "numbers",
    several: "rows",
    holder: "one list of ratios may have",
};

const CELLS: Rows = Rows {
    one: "a [lowest degree, highest degree, landings, node exposure, end exposure] cell",
    cells: "numbers",
    several: "cells",
    holder: "the windows of one link list may have",
};

/// `{"ratios": [[ratio, variance, landings], …], "windows": [{"cells": […]}, …]}`, at most `most` ratios and as many
/// windows and cells.
pub fn link_events(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<LinkEvents> {
    let body = object(raw, at, &["ratios", "windows"], faults)?;
    let ratios = body.required("ratios", &at, faults).and_then(|raw| ratios(raw, at.field("ratios"), most, faults));
    let windows = body.required("windows", &at, faults).and_then(|raw| windows(raw, at.field("windows"), most, faults));
    let found = LinkEvents::new(ratios?, windows?);
    for fault in found.as_ref().err().into_iter().flatten() {
        match fault.index {
            Some(index) => faults.add(&at.field(fault.field).item(index), fault.detail.as_str()),
            None => faults.add(&at.field(fault.field), fault.detail.as_str()),
        }
    }
    found.ok()
}

fn ratios(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<Vec<RatioClass>> {
    let plain = |(ratio, variance, Whole(landings)): (f64, f64, Whole)| {
        Some(RatioClass { ratio: ratio + 0.0, variance: variance + 0.0, landings })
    };
    rows(raw, at, (&RATIOS, most), faults, plain, |[ratio, variance, landings], at, faults| {
        let ratio = real(ratio, at.item(0), faults);
        let variance = real(variance, at.item(1), faults);
        let landings = whole(landings, at.item(2), u64::MAX, faults);
        Some(RatioClass { ratio: ratio?, variance: variance?, landings: landings? })
    })
}

fn windows(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<Vec<AttachmentWindow>> {
    let (mut windows, mut total) = (Vec::new(), 0);
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        let cells = object(item, at, &["cells"], faults)
            .and_then(|window| window.required("cells", &at, faults))
            .and_then(|raw| cells(raw, at.field("cells"), most, faults));
        total += cells.as_ref().map_or(0, Vec::len);
        windows.extend(cells.map(|cells| AttachmentWindow { cells }));
    })?;
    if length > most {
        faults.add(&at, format!("{length} windows are more than the {most} that one link list may have"));
    } else if total > most {
        faults.add(&at, format!("{total} cells are more than the {most} that {}", CELLS.holder));
    }
    (windows.len() == length).then_some(windows)
}

fn cells(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<Vec<AttachmentCell>> {
    type Plain = (Whole, Whole, Whole, f64, f64);
    // Adding 0 turns -0 into 0, as wherever reals are read.
    let plain = |(Whole(lowest), Whole(highest), Whole(landings), nodes, ends): Plain| {
        let cell = AttachmentCell { lowest, highest, landings, node_exposure: nodes + 0.0, end_exposure: ends + 0.0 };
        (lowest.max(highest) <= MAX_DEGREE).then_some(cell)
    };
    rows(raw, at, (&CELLS, most), faults, plain, |[lowest, highest, landings, nodes, ends], at, faults| {
        let lowest = whole(lowest, at.item(0), MAX_DEGREE, faults);
        let highest = whole(highest, at.item(1), MAX_DEGREE, faults);
        let landings = whole(landings, at.item(2), u64::MAX, faults);
        let node_exposure = real(nodes, at.item(3), faults);
        let end_exposure = real(ends, at.item(4), faults);
        Some(AttachmentCell {
            lowest: lowest?,
            highest: highest?,
            landings: landings?,
            node_exposure: node_exposure?,
            end_exposure: end_exposure?,
        })
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::api::decode::Place;

    fn read(text: &str, most: usize) -> Result<LinkEvents, Vec<(String, String)>> {
        let mut faults = Faults::default();
        let found = link_events(serde_json::from_str(text).unwrap(), At::ROOT, most, &mut faults);
        found.filter(|_| faults.is_empty()).ok_or_else(|| {
            let place = |place| if let Place::Body(pointer) = place { pointer } else { String::new() };
            faults.into_parts().0.into_iter().map(|fault| (place(fault.place), fault.detail)).collect()
        })
    }

    #[test]
    fn numbers_in_any_spelling_read_the_same() {
        let plain = read(r#"{"ratios": [[1, 0, 5]], "windows": [{"cells": [[0, 2, 5, 10, 4]]}]}"#, 9).unwrap();
        let spelt = read(r#"{"windows": [{"cells": [[-0, 2.0, 5e0, 1e1, 4.0]]}], "ratios": [[1.0, -0, 5.0]]}"#, 9);
        assert_eq!(spelt.unwrap(), plain);
        assert_eq!(plain.landings(), 5);
    }

    #[test]
    fn every_fault_has_its_place() {
        let text = r#"{"ratios": [[1, "x", -5], [1], [1e400, 0, 1]],
            "windows": [{"cells": [[0, 2.5, 5, null, 4]]}, {}, {"cells": [[0, 9007199254740992, 1, 1, 1]]}, 7], "more": 1}"#;
        let places: Vec<String> = read(text, 9).unwrap_err().into_iter().map(|(place, _)| place).collect();
        let expected = [
            "/more",
            "/ratios/0/1",
            "/ratios/0/2",
            "/ratios/1",
            "/ratios/2/0",
            "/windows/0/cells/0/1",
            "/windows/0/cells/0/3",
            "/windows/1",
            "/windows/2/cells/0/1",
            "/windows/3",
        ];
        assert_eq!(places, expected);
    }

    #[test]
    fn what_no_list_can_have_is_refused_where_it_stands() {
        let cells =
            |cells: &str| format!(r#"{{"ratios": [[1, 0, 5]], "windows": [{{"cells": []}}, {{"cells": {cells}}}]}}"#);
        for (text, place, words) in [
            (cells("[[3, 2, 1, 1, 1]]"), "/windows/1", "ascending"),
            (cells("[[0, 1, 1, 0, 1]]"), "/windows/1", "nodes to land on"),
            (cells("[[0, 1, 1, -1, 1]]"), "/windows/1", "not negative"),
            (
                cells("[[0,0,0,1,1],[1,1,0,1,1],[2,2,0,1,1],[3,3,0,1,1]]"),
                "/windows/1/cells",
                "4 cells are more than the 3",
            ),
            (r#"{"ratios": [[1, 0, 0]], "windows": []}"#.into(), "/ratios", "no link landed"),
            (r#"{"ratios": [[-1, 0, 5]], "windows": []}"#.into(), "/ratios/0", "not negative"),
            (r#"{"ratios": [[1, 0, 18446744073709551615], [2, 0, 1]], "windows": []}"#.into(), "/ratios", "2^64 - 1"),
        ] {
            let faults = read(&text, 3).unwrap_err();
            assert!(faults.iter().any(|(at, detail)| at == place && detail.contains(words)), "{text}: {faults:?}");
        }
    }
}

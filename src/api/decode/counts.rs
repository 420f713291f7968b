//! Degree counts: a fast way for lists without a fault, and a slow one that finds every fault.

use std::fmt;

use serde::de::{DeserializeSeed, Deserializer, Error, IgnoredAny, SeqAccess, Visitor};
use serde_json::value::RawValue;

use super::number::whole_from_float;
use super::{At, Faults, kind_of, list, whole};
use crate::model::{DegreeCounts, MAX_DEGREE};

/// `[[degree, nodes], …]`, at most `most` pairs.
pub fn degree_counts(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<DegreeCounts> {
    let fast = Pairs { most }.deserialize(&mut serde_json::Deserializer::from_str(raw.get()));
    let pairs = match fast {
        Ok(pairs) => pairs,
        Err(_) => pairs_with_faults(raw, at, most, faults)?,
    };
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

/// The pairs, when the list turns out to have no fault after all.
fn pairs_with_faults(raw: &RawValue, at: At<'_>, most: usize, faults: &mut Faults) -> Option<Vec<(u64, u64)>> {
    let length = serde_json::from_str::<Vec<IgnoredAny>>(raw.get()).map_or(0, |items| items.len());
    if length > most {
        faults.add(&at, format!("{length} pairs are more than the {most} that one snapshot may have"));
        return None;
    }
    let mut pairs = Vec::with_capacity(length);
    list(raw, at, faults, |index, item, faults| pairs.extend(pair(item, at.item(index), faults)))?;
    (pairs.len() == length).then_some(pairs)
}

fn pair(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<(u64, u64)> {
    if !raw.get().starts_with('[') {
        faults.add(&at, format!("a [degree, nodes] pair is wanted here, not {}", kind_of(raw)));
        return None;
    }
    let mut numbers = [None; 2];
    let length = list(raw, at, faults, |index, item, faults| {
        if let Some(slot) = numbers.get_mut(index) {
            let largest = if index == 0 { MAX_DEGREE } else { u64::MAX };
            *slot = whole(item, at.item(index), largest, faults);
        }
    })?;
    if length != 2 {
        faults.add(&at, format!("a [degree, nodes] pair has 2 numbers, not {length}"));
        return None;
    }
    numbers[0].zip(numbers[1])
}

struct Pairs {
    most: usize,
}

impl<'de> DeserializeSeed<'de> for Pairs {
    type Value = Vec<(u64, u64)>;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<Self::Value, D::Error> {
        deserializer.deserialize_seq(self)
    }
}

impl<'de> Visitor<'de> for Pairs {
    type Value = Vec<(u64, u64)>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("an array of pairs")
    }

    fn visit_seq<S: SeqAccess<'de>>(self, mut items: S) -> Result<Self::Value, S::Error> {
        let mut pairs = Vec::new();
        while let Some((Whole(degree), Whole(nodes))) = items.next_element()? {
            if pairs.len() == self.most {
                return Err(S::Error::custom("too many pairs"));
            }
            pairs.push((degree, nodes));
        }
        Ok(pairs)
    }
}

/// A whole number in a list without a fault.
struct Whole(u64);

impl<'de> serde::Deserialize<'de> for Whole {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(WholeVisitor).map(Self)
    }
}

struct WholeVisitor;

impl Visitor<'_> for WholeVisitor {
    type Value = u64;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a whole number")
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<u64, E> {
        Ok(value)
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<u64, E> {
        whole_from_float(value).ok_or_else(|| E::custom("not a whole number"))
    }
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
}

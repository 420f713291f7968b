//! Lists of rows of numbers: a fast way for lists without a fault, and a slow one that finds every fault.

use std::fmt;
use std::marker::PhantomData;

use serde::de::{Deserialize, DeserializeSeed, Deserializer, Error, IgnoredAny, SeqAccess, Visitor};
use serde_json::value::RawValue;

use super::number::whole_from_float;
use super::{At, Faults, kind_of, list};

/// What the rows of a list are, in words.
pub struct Rows {
    /// One row with its article: "a [degree, nodes] pair".
    pub one: &'static str,
    /// What stands in a row: "numbers".
    pub cells: &'static str,
    /// Several rows: "pairs".
    pub several: &'static str,
    /// What has them, in whole: "one snapshot may have".
    pub holder: &'static str,
}

/// A list of at most `most` rows of `WIDTH` cells. `P` is a row as it is read where nothing is wrong, which `plain`
/// turns into `R`, or into none when something is; `read` takes a row apart cell by cell and notes what is wrong with
/// each.
pub fn rows<'r, P: Deserialize<'r>, R, const WIDTH: usize>(
    raw: &'r RawValue,
    at: At<'_>,
    (words, most): (&Rows, usize),
    faults: &mut Faults,
    plain: fn(P) -> Option<R>,
    read: impl Fn([&'r RawValue; WIDTH], At<'_>, &mut Faults) -> Option<R>,
) -> Option<Vec<R>> {
    let fast = Plain { most, plain, row: PhantomData };
    if let Ok(rows) = fast.deserialize(&mut serde_json::Deserializer::from_str(raw.get())) {
        return Some(rows);
    }
    let length = serde_json::from_str::<Vec<IgnoredAny>>(raw.get()).map_or(0, |items| items.len());
    if length > most {
        faults.add(&at, format!("{length} {} are more than the {most} that {}", words.several, words.holder));
        return None;
    }
    let mut found = Vec::with_capacity(length);
    list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        found.extend(cells(item, at, words, faults).and_then(|cells| read(cells, at, faults)));
    })?;
    // Complete when the list turns out to have no fault after all.
    (found.len() == length).then_some(found)
}

fn cells<'r, const WIDTH: usize>(
    raw: &'r RawValue,
    at: At<'_>,
    words: &Rows,
    faults: &mut Faults,
) -> Option<[&'r RawValue; WIDTH]> {
    if !raw.get().starts_with('[') {
        faults.add(&at, format!("{} is wanted here, not {}", words.one, kind_of(raw)));
        return None;
    }
    let mut cells = [raw; WIDTH];
    let length = list(raw, at, faults, |index, item, _| {
        if let Some(cell) = cells.get_mut(index) {
            *cell = item;
        }
    })?;
    if length != WIDTH {
        faults.add(&at, format!("{} has {WIDTH} {}, not {length}", words.one, words.cells));
        return None;
    }
    Some(cells)
}

struct Plain<P, R> {
    most: usize,
    plain: fn(P) -> Option<R>,
    row: PhantomData<P>,
}

impl<'de, P: Deserialize<'de>, R> DeserializeSeed<'de> for Plain<P, R> {
    type Value = Vec<R>;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<Self::Value, D::Error> {
        deserializer.deserialize_seq(self)
    }
}

impl<'de, P: Deserialize<'de>, R> Visitor<'de> for Plain<P, R> {
    type Value = Vec<R>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("an array of rows")
    }

    fn visit_seq<S: SeqAccess<'de>>(self, mut items: S) -> Result<Self::Value, S::Error> {
        let mut rows = Vec::new();
        while let Some(row) = items.next_element()? {
            if rows.len() == self.most {
                return Err(S::Error::custom("too many rows"));
            }
            rows.push((self.plain)(row).ok_or_else(|| S::Error::custom("a row with a fault"))?);
        }
        Ok(rows)
    }
}

/// A whole number in a list without a fault.
pub struct Whole(pub u64);

impl<'de> Deserialize<'de> for Whole {
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

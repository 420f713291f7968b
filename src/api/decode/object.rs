//! Objects, arrays and strings.

use std::fmt;

use serde::de::{Deserialize, Deserializer, Error, MapAccess, SeqAccess, Visitor};
use serde_json::value::RawValue;

use super::{At, Faults, kind_of};

/// Most fields of one object that are looked at; no object asked for here has a tenth of it.
const MOST_FIELDS: usize = 1_000;
/// Longest name that is told in full, bytes: the names asked for here have a fifth of it.
const LONGEST_NAME: usize = 200;
/// How alike a refused name and a known one must be for the known one to be suggested (Jaro–Winkler, 0 to 1).
const ALIKE: f64 = 0.8;

/// An object's fields, each raw.
pub struct Object<'r> {
    fields: Vec<(String, &'r RawValue)>,
}

impl<'r> Object<'r> {
    /// A field that may be left out.
    pub fn get(&self, name: &str) -> Option<&'r RawValue> {
        self.fields.iter().find(|(found, _)| found == name).map(|&(_, raw)| raw)
    }

    /// A field that must be there.
    pub fn required(&self, name: &str, at: &At<'_>, faults: &mut Faults) -> Option<&'r RawValue> {
        match self.get(name) {
            None => {
                faults.add(at, format!("the field {name:?} is missing"));
                None
            }
            Some(raw) if raw.get() == "null" => {
                faults.add(&at.field(name), format!("the field {name:?} is needed; it is null here"));
                None
            }
            found => found,
        }
    }
}

/// An object with the fields `known`; others, and repeated ones, are faults.
pub fn object<'r>(raw: &'r RawValue, at: At<'_>, known: &[&str], faults: &mut Faults) -> Option<Object<'r>> {
    let fields = fields(raw, at, faults)?;
    for (i, (name, _)) in fields.iter().enumerate() {
        if name.len() > LONGEST_NAME {
            // Its pointer would be as long: it is told by its beginning, at the object that it stands in.
            faults.add(&at, unknown_name("field", name, known));
        } else if !known.contains(&name.as_str()) {
            faults.add(&at.field(name), unknown_name("field", name, known));
        } else if fields[..i].iter().any(|(earlier, _)| earlier == name) {
            faults.add(&at.field(name), format!("the field {name:?} is given twice"));
        }
    }
    Some(Object { fields })
}

/// The fields of an object whose names are data, in the order they stand, repeated ones too.
pub fn fields<'r>(raw: &'r RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<(String, &'r RawValue)>> {
    if !raw.get().starts_with('{') {
        faults.add(&at, format!("an object is wanted here, not {}", kind_of(raw)));
        return None;
    }
    let fields = serde_json::from_str::<Fields<'_>>(raw.get());
    fields.map(|Fields(fields)| fields).map_err(|error| faults.add(&at, error.to_string())).ok()
}

/// What to say of a name that is not known.
pub fn unknown_name(what: &str, name: &str, known: &[&str]) -> String {
    let shown: String = name.chars().take(60).collect();
    let nearest = known
        .iter()
        .map(|&candidate| (strsim::jaro_winkler(candidate, &shown), candidate))
        .max_by(|a, b| a.0.total_cmp(&b.0));
    match nearest {
        Some((alike, candidate)) if alike >= ALIKE => {
            format!("there is no {what} {shown:?}; did you mean {candidate:?}?")
        }
        _ if known.is_empty() => format!("there is no {what} {shown:?}; none is taken here"),
        _ => format!("there is no {what} {shown:?}; the known ones are {}", known.join(", ")),
    }
}

/// Hands each item of an array to `read`, with its index; stops when the faults are full. Returns the length.
pub fn list<'r>(
    raw: &'r RawValue,
    at: At<'_>,
    faults: &mut Faults,
    mut read: impl FnMut(usize, &'r RawValue, &mut Faults),
) -> Option<usize> {
    if !raw.get().starts_with('[') {
        faults.add(&at, format!("an array is wanted here, not {}", kind_of(raw)));
        return None;
    }
    let mut length = 0;
    let mut each = |item| {
        if !faults.is_full() {
            read(length, item, faults);
        }
        length += 1;
    };
    match serde_json::Deserializer::from_str(raw.get()).deserialize_seq(Each(&mut each)) {
        Ok(()) => Some(length),
        Err(error) => {
            faults.add(&at, error.to_string());
            None
        }
    }
}

/// A string.
pub fn text(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<String> {
    match serde_json::from_str(raw.get()) {
        Ok(text) => Some(text),
        Err(_) if raw.get().starts_with('"') => {
            faults.add(&at, "the string holds an escape that stands for no character");
            None
        }
        Err(_) => {
            faults.add(&at, format!("a string is wanted here, not {}", kind_of(raw)));
            None
        }
    }
}

struct Fields<'r>(Vec<(String, &'r RawValue)>);

impl<'r> Deserialize<'r> for Fields<'r> {
    fn deserialize<D: Deserializer<'r>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_map(FieldsVisitor).map(Self)
    }
}

struct FieldsVisitor;

impl<'r> Visitor<'r> for FieldsVisitor {
    type Value = Vec<(String, &'r RawValue)>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("an object")
    }

    fn visit_map<M: MapAccess<'r>>(self, mut map: M) -> Result<Self::Value, M::Error> {
        let mut fields = Vec::new();
        while let Some(entry) = map.next_entry()? {
            if fields.len() == MOST_FIELDS {
                return Err(M::Error::custom(format_args!("the object has more than {MOST_FIELDS} fields")));
            }
            fields.push(entry);
        }
        Ok(fields)
    }
}

struct Each<'f, 'r>(&'f mut dyn FnMut(&'r RawValue));

impl<'r> Visitor<'r> for Each<'_, 'r> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("an array")
    }

    fn visit_seq<S: SeqAccess<'r>>(self, mut items: S) -> Result<(), S::Error> {
        while let Some(item) = items.next_element()? {
            (self.0)(item);
        }
        Ok(())
    }
}

//! Reading JSON so that every fault is found and each has its place.
//!
//! A body is first cut into raw values, which checks its grammar; each value is then read by what it must be. What is
//! wrong goes to [`Faults`] with an RFC 6901 pointer, and reading goes on. Numbers are judged by their text, so that
//! 1e400 is refused where it stands instead of ending the parse.

mod counts;
mod csv;
mod faults;
mod link_events;
mod number;
mod object;
mod rows;
mod segments_csv;
mod time;

pub use counts::{degree_counts, moves};
pub use csv::{degree_counts_csv, moves_csv};
pub use faults::{At, Fault, Faults, Place};
pub use link_events::link_events;
pub use number::{real, whole};
pub use object::{Object, fields, list, object, text, unknown_name};
pub use segments_csv::segments_csv;
pub use time::{every, every_of, instant, instant_of};

use serde_json::value::RawValue;

/// Longest piece of a refused value that is quoted back.
const QUOTED_CHARS: usize = 40;

/// What a raw value is, as JSON names it.
fn kind_of(raw: &RawValue) -> &'static str {
    match raw.get().as_bytes().first() {
        Some(b'{') => "an object",
        Some(b'[') => "an array",
        Some(b'"') => "a string",
        Some(b't' | b'f') => "a boolean",
        Some(b'n') => "null",
        _ => "a number",
    }
}

/// A raw value as it is quoted in a message: at most a few characters of it.
fn quoted(raw: &RawValue) -> String {
    let text = raw.get();
    match text.char_indices().nth(QUOTED_CHARS) {
        Some((end, _)) => format!("{}…", &text[..end]),
        None => text.to_owned(),
    }
}

/// What to do about a value of the wrong kind. A list's item cannot be left out, a field that is needed is refused
/// before it is read.
fn advice_for(raw: &RawValue, at: &At<'_>) -> &'static str {
    match raw.get().as_bytes().first() {
        Some(b'n') if !at.is_item() => "; leave the field out when there is nothing to say",
        Some(b'"') => "; write it without quotes",
        _ => "",
    }
}

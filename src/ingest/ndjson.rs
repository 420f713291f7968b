//! Lists of JSON objects, one a line.

use std::borrow::Cow;
use std::fmt;

use memchr::memchr;
use serde::de::{Deserialize, Deserializer, Error, Visitor};

use super::clock::from_seconds;
use super::intake::Intake;
use super::report::shown;

/// What a line should be.
const EXAMPLE: &str = "a line is an object like {\"time\":\"2026-12-01\",\"source\":1,\"target\":2}";

/// Takes the complete lines of `block`; returns how many bytes they are.
pub fn read(block: &[u8], last: bool, intake: &mut Intake) -> usize {
    let mut at = 0;
    while let Some(rest) = block.get(at..).filter(|rest| !rest.is_empty()) {
        let (text, line) = match memchr(b'\n', rest) {
            Some(end) => (end, end + 1),
            None if last => (rest.len(), rest.len()),
            None => break,
        };
        intake.pass(1);
        let text = rest.get(..text).unwrap_or_default().trim_ascii();
        if !text.is_empty() {
            object(text, intake);
        }
        at += line;
    }
    at
}

fn object(text: &[u8], intake: &mut Intake) {
    // The fields alone, in an array, would be taken too.
    if !text.starts_with(b"{") {
        return intake.malformed(|| format!("{} is no JSON object; {EXAMPLE}", shown(text)));
    }
    let link: Link<'_> = match serde_json::from_slice(text) {
        Ok(link) => link,
        Err(error) => return intake.malformed(|| why_no_link(&error)),
    };
    let (source, target) = (link.source.text(), link.target.text());
    match link.time {
        Value::Text(time) => intake.link(time.as_bytes(), source.as_bytes(), target.as_bytes()),
        Value::Whole(seconds) => intake.link(seconds.to_string().as_bytes(), source.as_bytes(), target.as_bytes()),
        Value::Real(seconds) => match from_seconds(seconds) {
            Some(time) => intake.link_at(time, source.as_bytes(), target.as_bytes()),
            None => intake.malformed(|| format!("the time {seconds} is out of range: it is in seconds since 1970")),
        },
    }
}

/// What is wrong, with the column but without the line, which is always the first here.
fn why_no_link(error: &serde_json::Error) -> String {
    let text = error.to_string();
    let what = text.rsplit_once(" at line ").map_or(text.as_str(), |(what, _)| what);
    format!("{what} (column {}); {EXAMPLE}", error.column())
}

/// Other keys are passed over.
#[derive(serde::Deserialize)]
struct Link<'a> {
    #[serde(borrow)]
    time: Value<'a>,
    #[serde(borrow)]
    source: Identifier<'a>,
    #[serde(borrow)]
    target: Identifier<'a>,
}

enum Value<'a> {
    Text(Cow<'a, str>),
    Whole(i128),
    Real(f64),
}

/// A string or an integer, which is the same as its digits.
struct Identifier<'a>(Cow<'a, str>);

impl Identifier<'_> {
    fn text(&self) -> &str {
        &self.0
    }
}

impl<'de: 'a, 'a> Deserialize<'de> for Identifier<'a> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        match deserializer.deserialize_any(ValueVisitor("a string or an integer"))? {
            Value::Text(text) => Ok(Self(text)),
            Value::Whole(number) => Ok(Self(number.to_string().into())),
            Value::Real(_) => Err(D::Error::custom("an identifier is a string or an integer of up to 64 bits")),
        }
    }
}

impl<'de: 'a, 'a> Deserialize<'de> for Value<'a> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(ValueVisitor("a string or a number"))
    }
}

struct ValueVisitor(&'static str);

impl<'de> Visitor<'de> for ValueVisitor {
    type Value = Value<'de>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.0)
    }

    fn visit_borrowed_str<E: Error>(self, text: &'de str) -> Result<Value<'de>, E> {
        Ok(Value::Text(text.into()))
    }

    fn visit_str<E: Error>(self, text: &str) -> Result<Value<'de>, E> {
        Ok(Value::Text(text.to_owned().into()))
    }

    fn visit_u64<E: Error>(self, number: u64) -> Result<Value<'de>, E> {
        Ok(Value::Whole(number.into()))
    }

    fn visit_i64<E: Error>(self, number: i64) -> Result<Value<'de>, E> {
        Ok(Value::Whole(number.into()))
    }

    fn visit_f64<E: Error>(self, number: f64) -> Result<Value<'de>, E> {
        Ok(Value::Real(number))
    }
}

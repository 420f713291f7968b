//! What the command line adds to a request: a file that tells of a network becomes one that asks of it.

use std::fmt;
use std::path::PathBuf;

use clap::Args;
use serde::de::{Deserialize, Deserializer, MapAccess, Visitor};
use serde_json::value::RawValue;

use crate::app::Stop;

/// Fields of a forecast's body given as options; each takes the place of the body's own.
#[derive(Debug, Args)]
pub struct Completion {
    /// Hub thresholds in place of the body's
    #[arg(long, value_name = "N,N,…")]
    thresholds: Option<String>,
    /// Date to forecast in place of the body's dates; with --every the last of several
    #[arg(long, value_name = "DATE")]
    until: Option<String>,
    /// Period between dates, up to --until
    #[arg(long, value_name = "PERIOD", requires = "until")]
    every: Option<String>,
    /// Interval levels in place of the body's
    #[arg(long, value_name = "P,P,…")]
    levels: Option<String>,
    /// New nodes a day in place of the body's arrivals
    #[arg(long, value_name = "PER_DAY")]
    arrivals: Option<String>,
    /// Table of planned arrivals in place of the body's: columns from, per_day and, if wanted, growth_per_year
    #[arg(long, value_name = "FILE", conflicts_with = "arrivals")]
    arrivals_csv: Option<PathBuf>,
}

impl Completion {
    /// A body with these fields over its own. One that is no JSON object is left to the reader, which says so.
    pub fn over(&self, body: Vec<u8>) -> Result<Vec<u8>, Stop> {
        let added = self.fields()?;
        if added.is_empty() {
            return Ok(body);
        }
        let json = body.strip_prefix(b"\xef\xbb\xbf").unwrap_or(&body);
        let Ok(Fields(mut fields)) = serde_json::from_slice(json) else { return Ok(body) };
        let replaced = |name: &str| {
            let dated = self.until.is_some() && ["dates", "horizon"].contains(&name);
            dated || added.iter().any(|(field, _)| *field == name)
        };
        fields.retain(|(name, _)| !replaced(name));
        let own = fields.iter().map(|(name, value)| (name.as_str(), *value));
        let fields = own.chain(added.iter().map(|(name, value)| (*name, value.as_ref())));
        let fields: Vec<String> = fields.map(|(name, value)| format!("{}:{}", quoted(name), value.get())).collect();
        Ok(format!("{{{}}}", fields.join(",")).into_bytes())
    }

    /// The options given, each after a space, as a shell takes them.
    pub fn options(&self) -> String {
        let table = self.arrivals_csv.as_ref().map(|file| file.display().to_string());
        let given = [
            ("--thresholds", &self.thresholds),
            ("--until", &self.until),
            ("--every", &self.every),
            ("--levels", &self.levels),
            ("--arrivals", &self.arrivals),
            ("--arrivals-csv", &table),
        ];
        let given = given.into_iter().filter_map(|(option, value)| Some((option, value.as_ref()?)));
        given.map(|(option, value)| format!(" {option} {}", shell_word(value))).collect()
    }

    /// The fields given. Whether their values make sense is told by whoever reads the body.
    fn fields(&self) -> Result<Vec<(&'static str, Box<RawValue>)>, Stop> {
        let mut fields = Vec::new();
        let mut add = |name, option: &str, json: String, example: &str| match RawValue::from_string(json) {
            Ok(value) => {
                fields.push((name, value));
                Ok(())
            }
            Err(_) => Err(Stop::Refused(format!("tailcast: {option}: write numbers like {example}\n"))),
        };
        if let Some(list) = &self.thresholds {
            add("thresholds", "--thresholds", format!("[{list}]"), "10,100,1000")?;
        }
        if let Some(list) = &self.levels {
            add("levels", "--levels", format!("[{list}]"), "0.5,0.9")?;
        }
        if let Some(rate) = &self.arrivals {
            add("arrivals", "--arrivals", format!("{{\"per_day\":{rate}}}"), "42.5")?;
        }
        if let Some(file) = &self.arrivals_csv {
            let refused = |error: &dyn fmt::Display| Stop::failed(&file.display().to_string(), error);
            let table = std::fs::read(file).map_err(|error| refused(&error))?;
            let table = String::from_utf8(table).map_err(|error| refused(&error))?;
            add("arrivals", "--arrivals-csv", format!("{{\"csv\":{}}}", quoted(&table)), "")?;
        }
        match (&self.until, &self.every) {
            (Some(until), Some(every)) => {
                let horizon = format!("{{\"until\":{},\"every\":{}}}", quoted(until), quoted(every));
                add("horizon", "--until", horizon, "")?;
            }
            (Some(until), None) => add("dates", "--until", format!("[{}]", quoted(until)), "")?,
            (None, _) => {}
        }
        Ok(fields)
    }
}

/// A text as one word of a shell's command line (POSIX).
pub fn shell_word(text: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "-_./,:+=@%".contains(c);
    if !text.is_empty() && text.chars().all(plain) {
        text.to_owned()
    } else {
        format!("'{}'", text.replace('\'', "'\\''"))
    }
}

fn quoted(text: &str) -> String {
    serde_json::Value::from(text).to_string()
}

/// An object's fields as they stand, repeated ones too.
struct Fields<'a>(Vec<(String, &'a RawValue)>);

impl<'de: 'a, 'a> Deserialize<'de> for Fields<'a> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct FieldsVisitor;
        impl<'de> Visitor<'de> for FieldsVisitor {
            type Value = Fields<'de>;

            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("an object")
            }

            fn visit_map<M: MapAccess<'de>>(self, mut map: M) -> Result<Fields<'de>, M::Error> {
                let mut fields = Vec::new();
                while let Some(field) = map.next_entry()? {
                    fields.push(field);
                }
                Ok(Fields(fields))
            }
        }
        deserializer.deserialize_map(FieldsVisitor)
    }
}

//! A tracked network's name and settings, validated.

use serde::Serialize;

use super::inputs::{TextFault, checked_text, sha256_hex};
use super::plan;
use crate::model::{DegreeKind, EntryDegrees, StandingPlan};
use crate::store::NewNetwork;

const MAX_NAME_CHARS: usize = 100;
const MAX_DESCRIPTION_CHARS: usize = 2_000;

/// A network's name: what stands in its addresses, so of characters that need no escape there (RFC 3986, section 2.3).
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NetworkName(String);

/// The text is no network's name.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error(
    "a network's name is 1 to {MAX_NAME_CHARS} of the letters a to z and A to Z, digits, and . _ ~ -, and starts with a \
     letter or digit"
)]
pub struct NameFault;

impl NetworkName {
    /// Checks a name.
    ///
    /// # Errors
    /// When it is empty or too long, or holds another character.
    pub fn new(text: &str) -> Result<Self, NameFault> {
        let plain = |byte: u8| byte.is_ascii_alphanumeric() || b"._~-".contains(&byte);
        let sound = text.len() <= MAX_NAME_CHARS
            && text.bytes().all(plain)
            && text.starts_with(|first: char| first.is_ascii_alphanumeric());
        if sound { Ok(Self(text.to_owned())) } else { Err(NameFault) }
    }

    /// The text.
    pub fn as_str(&self) -> &str {
        &self.0
    }
}

/// The caller's words on a network: at most 2000 characters, no NUL.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Description(String);

impl Description {
    /// Checks a description.
    ///
    /// # Errors
    /// When it is too long or holds a NUL character.
    pub fn new(text: String) -> Result<Self, TextFault> {
        checked_text(text, MAX_DESCRIPTION_CHARS).map(Self)
    }
}

/// What holds for all of a network's evidence.
#[derive(Debug, Clone)]
pub struct NetworkSettings {
    /// What its degrees count.
    pub degree_kind: DegreeKind,
    /// The caller's words.
    pub description: Option<Description>,
    /// Entry degrees, when the caller knows them.
    pub entry_degrees: Option<EntryDegrees>,
    /// What is asked of its forecasts.
    pub forecast_plan: Option<StandingPlan>,
}

impl NetworkSettings {
    /// The settings as they are stored under `name`.
    ///
    /// # Errors
    /// When a share is not finite, which no validated one is.
    pub(super) fn to_stored(&self, name: &NetworkName) -> Result<NewNetwork, serde_json::Error> {
        #[derive(Serialize)]
        struct Settings<'a> {
            degree_kind: &'a str,
            description: Option<&'a str>,
            entry_degrees: Option<&'a str>,
            // Left out when there is none, as before there could be one: tags do not change.
            #[serde(skip_serializing_if = "Option::is_none")]
            forecast_plan: Option<&'a str>,
        }
        let entry_degrees =
            self.entry_degrees.as_ref().map(|entry| serde_json::to_string(entry.shares())).transpose()?;
        let description = self.description.as_ref().map(|Description(text)| text.as_str());
        let forecast_plan = self.forecast_plan.as_ref().map(plan::to_json).transpose()?;
        let tagged = Settings {
            degree_kind: kind_name(self.degree_kind),
            description,
            entry_degrees: entry_degrees.as_deref(),
            forecast_plan: forecast_plan.as_deref(),
        };
        Ok(NewNetwork {
            name: name.0.clone(),
            degree_kind: self.degree_kind,
            description: description.map(str::to_owned),
            tag: sha256_hex(&serde_json::to_vec(&tagged)?),
            entry_degrees,
            forecast_plan,
        })
    }
}

/// The name of a kind of degree.
pub fn kind_name(kind: DegreeKind) -> &'static str {
    match kind {
        DegreeKind::Received => "received",
        DegreeKind::Total => "total",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_what_addresses_take_unescaped() {
        for name in ["h", "heronsgate", "Heronsgate-followers_2.1~a", "7", &"x".repeat(100)] {
            assert!(NetworkName::new(name).is_ok(), "{name}");
        }
        for name in ["", ".", "..", "-a", "a b", "a/b", "a\0", "a\n", "é", "a%20b", &"x".repeat(101)] {
            assert!(NetworkName::new(name).is_err(), "{name}");
        }
    }
}

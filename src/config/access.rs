//! Who may ask: keys, what commands send, how long the trail of writes is kept; and which pages of other origins may ask.

use std::net::SocketAddr;
use std::time::Duration;

use serde::de::Error as _;
use serde::{Deserialize, Deserializer};
use url::Url;

use crate::credential::Credential;

const DAY_SECONDS: u64 = 86_400;

/// Who may ask.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AccessConfig {
    /// Whether requests need a key.
    pub keys: KeysNeeded,
    /// The key that commands of this program send.
    #[serde(deserialize_with = "credential")]
    pub key: Option<Credential>,
    /// How long a line of the trail of writes is kept, days.
    pub audit_days: u64,
}

impl AccessConfig {
    /// How long a line of the trail of writes is kept.
    pub fn audit_time(&self) -> Duration {
        Duration::from_secs(self.audit_days.saturating_mul(DAY_SECONDS))
    }

    /// Why the service must not listen at an address, if it must not.
    pub fn refusal(&self, bind: SocketAddr) -> Option<String> {
        let open = self.keys == KeysNeeded::Off && !bind.ip().is_loopback();
        open.then(|| {
            format!(
                "bind is {bind}, which other machines reach, and access.keys is \"off\": whoever reaches it could read and change \
                 everything. Set TAILCAST_ACCESS_KEYS=required and make a key with `tailcast keys create NAME`; or, where a \
                 gateway in front decides who may ask, set it to {ANYONE}"
            )
        })
    }
}

/// Whether requests need a key.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(try_from = "String")]
pub enum KeysNeeded {
    /// None is asked for; only at an address that no other machine reaches.
    Off,
    /// Every request but those of health, documentation and the page's files.
    Required,
    /// None is asked for, at whatever address.
    AnyoneMayReadAndWrite,
}

/// The words for no keys where other machines reach the service.
const ANYONE: &str = "anyone_who_reaches_this_address_may_read_and_write";

impl TryFrom<String> for KeysNeeded {
    type Error = String;

    fn try_from(name: String) -> Result<Self, String> {
        match name.as_str() {
            "off" => Ok(Self::Off),
            "required" => Ok(Self::Required),
            ANYONE => Ok(Self::AnyoneMayReadAndWrite),
            _ => Err(format!("access.keys is \"off\", \"required\" or \"{ANYONE}\", not {name:?}")),
        }
    }
}

/// The key, never repeated in an error.
fn credential<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Option<Credential>, D::Error> {
    let text = String::deserialize(deserializer).map_err(|_| D::Error::custom("access.key is no text"))?;
    if text.trim().is_empty() {
        return Ok(None);
    }
    let fault =
        || D::Error::custom("access.key is no key; it is what `tailcast keys create` printed, tailcast_… in full");
    Credential::parse(text.trim()).map(Some).ok_or_else(fault)
}

/// Origins whose pages may ask: a list, or one text with commas between, as a variable has it.
pub fn origins<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<String>, D::Error> {
    #[derive(Deserialize)]
    #[serde(untagged)]
    enum Given {
        One(String),
        List(Vec<String>),
    }
    let given = match Given::deserialize(deserializer)? {
        Given::One(text) => text.split(',').map(str::to_owned).collect(),
        Given::List(list) => list,
    };
    let given = given.iter().map(|text| text.trim()).filter(|text| !text.is_empty());
    given.map(|text| origin(text).map_err(D::Error::custom)).collect()
}

/// An origin as browsers send it (RFC 6454, section 6.2).
fn origin(text: &str) -> Result<String, String> {
    let read = Url::parse(text).ok().filter(|url| matches!(url.scheme(), "http" | "https"));
    match read.map(|url| url.origin().ascii_serialization()) {
        Some(origin) if origin == text => Ok(origin),
        _ => Err(format!(
            "http.allowed_origins has {text:?}: an origin is a scheme and a host, in small letters, with a port where that is not \
             the scheme's own, and nothing after it, as in https://planning.example.org; there is no word for all of them"
        )),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::{Config, SettingsError};

    fn with(variables: &[(&str, &str)]) -> Result<Config, SettingsError> {
        Config::from_sources(None, variables.iter().map(|&(k, v)| (format!("TAILCAST_{k}"), v.to_owned())))
    }

    #[test]
    fn without_keys_only_loopback_is_served() {
        let refusal = |keys: &str, bind: &str| {
            let config = with(&[("ACCESS_KEYS", keys), ("BIND", bind)]).unwrap();
            config.access.refusal(config.bind)
        };
        for bind in ["127.0.0.1:80", "[::1]:80"] {
            assert_eq!(refusal("off", bind), None);
        }
        for bind in ["0.0.0.0:80", "[::]:80", "10.0.0.1:80"] {
            let why = refusal("off", bind).unwrap();
            assert!(why.contains("TAILCAST_ACCESS_KEYS=required") && why.contains(ANYONE), "{why}");
            assert_eq!(refusal("required", bind), None);
            assert_eq!(refusal(ANYONE, bind), None);
        }
        let error = with(&[("ACCESS_KEYS", "no")]).unwrap_err().to_string();
        assert!(error.contains("\"off\", \"required\" or"), "{error}");
    }

    #[test]
    fn a_key_is_read_and_never_shown() {
        let key = Credential::generate();
        let text = key.reveal();
        let config = with(&[("ACCESS_KEY", &text)]).unwrap();
        assert_eq!(config.access.key.as_ref(), Some(&key));
        assert!(!format!("{config:?}").contains(&text));
        let error = with(&[("ACCESS_KEY", &text[..60])]).unwrap_err().to_string();
        assert!(error.contains("keys create") && !error.contains(&text[..30]), "{error}");
    }

    #[test]
    fn origins_are_listed_one_by_one() {
        let listed = with(&[("HTTP_ALLOWED_ORIGINS", "https://planning.example.org, http://localhost:3000")]).unwrap();
        assert_eq!(listed.http.allowed_origins, ["https://planning.example.org", "http://localhost:3000"]);
        assert!(with(&[]).unwrap().http.allowed_origins.is_empty());
        for wrong in [
            "*",
            "null",
            "planning.example.org",
            "https://a.example/",
            "https://a.example:443",
            "https://A.example",
            "https://u@a.example",
            "ftp://a.example",
        ] {
            let error = with(&[("HTTP_ALLOWED_ORIGINS", wrong)]).unwrap_err().to_string();
            assert!(error.contains("as in https://planning.example.org"), "{wrong}: {error}");
        }
    }
}

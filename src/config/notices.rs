//! Where notices may go and how they are tried.

use std::time::Duration;

use serde::de::Error as _;
use serde::{Deserialize, Deserializer};

use crate::webhook::{Destination, Secret};

/// Notices: calls to other machines when a limit's risk passes its line or forecasts drift.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct NoticesConfig {
    /// Where they may go; none: nowhere.
    #[serde(deserialize_with = "destinations")]
    pub destinations: Vec<Destination>,
    /// What they are signed with.
    #[serde(deserialize_with = "secret")]
    pub secret: Option<Secret>,
    /// How long an event is tried, hours.
    pub attempts_for_hours: u64,
    /// Longest time that one attempt takes, seconds.
    pub timeout_seconds: u64,
    /// Pause after the first attempt that failed, milliseconds; each failure doubles it.
    pub first_pause_ms: u64,
    /// Longest pause, seconds.
    pub longest_pause_seconds: u64,
}

impl NoticesConfig {
    /// How long an event is tried.
    pub fn attempts_for(&self) -> Duration {
        Duration::from_secs(self.attempts_for_hours.saturating_mul(3_600))
    }

    /// Longest time that one attempt takes.
    pub fn timeout(&self) -> Duration {
        Duration::from_secs(self.timeout_seconds)
    }

    /// Pause after so many attempts that failed one after the other, without jitter.
    pub fn pause(&self, failures: u64) -> Duration {
        let doublings = u32::try_from(failures.saturating_sub(1)).unwrap_or(u32::MAX);
        let factor = 1_u64.checked_shl(doublings).unwrap_or(u64::MAX);
        let pause = Duration::from_millis(self.first_pause_ms.saturating_mul(factor));
        pause.min(self.longest_pause())
    }

    /// Longest pause, without jitter.
    pub fn longest_pause(&self) -> Duration {
        Duration::from_secs(self.longest_pause_seconds)
    }
}

fn destinations<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<Destination>, D::Error> {
    let given = one_or_many(deserializer)?;
    let read = |text: &String| {
        let fault = |why| D::Error::custom(format!("notices.destinations has {text:?}: {why}"));
        Destination::new(text).map_err(fault)
    };
    given.iter().map(read).collect()
}

/// A list, or one text with commas between, as a variable has it.
pub(super) fn one_or_many<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<String>, D::Error> {
    #[derive(Deserialize)]
    #[serde(untagged)]
    enum Given {
        One(String),
        List(Vec<String>),
    }
    Ok(match Given::deserialize(deserializer)? {
        Given::One(text) => {
            text.split(',').map(|part| part.trim().to_owned()).filter(|part| !part.is_empty()).collect()
        }
        Given::List(list) => list,
    })
}

/// The secret, never repeated in an error.
fn secret<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Option<Secret>, D::Error> {
    let text = String::deserialize(deserializer).map_err(|_| D::Error::custom("notices.secret is no text"))?;
    let read = || Secret::new(&text).map_err(|why| D::Error::custom(format!("notices.secret: {why}")));
    if text.trim().is_empty() { Ok(None) } else { read().map(Some) }
}

#[cfg(test)]
mod tests {
    use crate::config::{Config, SettingsError};

    const SECRET: &str = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw";

    fn with(variables: &[(&str, &str)]) -> Result<Config, SettingsError> {
        Config::from_sources(None, variables.iter().map(|&(k, v)| (format!("TAILCAST_NOTICES_{k}"), v.to_owned())))
    }

    #[test]
    fn notices_are_off_until_destinations_and_a_secret_are_given() {
        let config = with(&[]).unwrap();
        assert!(config.notices.destinations.is_empty() && config.notices.secret.is_none());
        let listed = "https://hooks.example.org/team, http://10.0.0.5:9000";
        let config = with(&[("DESTINATIONS", listed), ("SECRET", SECRET)]).unwrap();
        assert_eq!(config.notices.destinations.len(), 2);
        assert!(!format!("{config:?}").contains("MfKQ"), "the secret is never shown");
        let error = with(&[("DESTINATIONS", listed)]).unwrap_err().to_string();
        assert!(error.contains("notices.secret") && error.contains("openssl"), "{error}");
    }

    #[test]
    fn a_list_in_a_file_is_read_too() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("settings.toml");
        let text = format!("[notices]\ndestinations = [\"https://hooks.example.org\"]\nsecret = \"{SECRET}\"\n");
        std::fs::write(&path, text).unwrap();
        let config = Config::from_sources(Some(&path), std::iter::empty()).unwrap();
        assert_eq!(config.notices.destinations.len(), 1);
    }

    #[test]
    fn settings_that_cannot_be_used_are_refused_without_the_secret() {
        for (name, value, words) in [
            ("DESTINATIONS", "http://hooks.example.org", "must start with https://"),
            ("DESTINATIONS", "hooks", "is not a web address"),
            ("SECRET", "hunter2", "notices.secret"),
            ("ATTEMPTS_FOR_HOURS", "0", "between 1 and"),
            ("TIMEOUT_SECONDS", "301", "between 1 and 300"),
        ] {
            let error = with(&[("SECRET", SECRET), (name, value)]).unwrap_err().to_string();
            assert!(error.contains(words), "{name} = {value}: {error}");
            assert!(!error.contains("hunter2") && !error.contains("MfKQ"), "{error}");
        }
    }

    #[test]
    fn a_fault_in_a_file_is_told_without_the_line_it_is_in() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("settings.toml");
        std::fs::write(&path, format!("[notices]\nsecret = \"{SECRET}\n")).unwrap();
        let error = Config::from_sources(Some(&path), std::iter::empty()).unwrap_err().to_string();
        assert!(error.contains("settings.toml") && error.contains("line 2"), "{error}");
        assert!(!error.contains("MfKQ"), "{error}");
    }

    #[test]
    fn pauses_double_up_to_the_longest() {
        let notices = with(&[("FIRST_PAUSE_MS", "1000"), ("LONGEST_PAUSE_SECONDS", "60")]).unwrap().notices;
        let seconds = |failures| notices.pause(failures).as_secs();
        assert_eq!([1, 2, 3, 6, 7, 8, 64, 65, u64::MAX].map(seconds), [1, 2, 4, 32, 60, 60, 60, 60, 60]);
    }
}

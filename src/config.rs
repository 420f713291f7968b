//! Settings: the compiled-in defaults, then a file, then `TAILCAST_*` variables; one small struct a concern.

use std::collections::BTreeMap;
use std::net::SocketAddr;
use std::path::Path;
use std::time::Duration;

use config::{ConfigError, File, FileFormat, Value, ValueKind};
use serde::Deserialize;

const DEFAULTS: &str = include_str!("../config/default.toml");
const VARIABLE_PREFIX: &str = "TAILCAST_";

/// All settings.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Config {
    /// Address and port to listen on.
    pub bind: SocketAddr,
    /// Where runs are kept.
    pub database: DatabaseConfig,
    /// Limits of the HTTP side.
    pub http: HttpConfig,
    /// Limits of the computing side.
    pub compute: ComputeConfig,
    /// Limits of one request's content.
    pub limits: LimitsConfig,
    /// Logging.
    pub log: LogConfig,
}

/// Where runs are kept and how.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct DatabaseConfig {
    /// `sqlite://FILE`.
    pub url: String,
    /// Connections that read at the same time.
    pub readers: u32,
    /// Longest wait for another process's lock, milliseconds.
    pub busy_timeout_ms: u64,
    /// Whether `serve` brings the tables up to date.
    pub migrate_on_start: bool,
}

/// Limits of the HTTP side.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct HttpConfig {
    /// Largest request body, bytes.
    pub body_limit_bytes: usize,
    /// Longest time to send a body, seconds.
    pub body_timeout_seconds: u64,
    /// Requests served at the same time.
    pub max_in_flight: usize,
    /// Time to finish after a stop signal, seconds.
    pub shutdown_grace_seconds: u64,
}

impl HttpConfig {
    /// Longest time to send a body.
    pub fn body_timeout(&self) -> Duration {
        Duration::from_secs(self.body_timeout_seconds)
    }

    /// Time to finish after a stop signal.
    pub fn shutdown_grace(&self) -> Duration {
        Duration::from_secs(self.shutdown_grace_seconds)
    }
}

/// Limits of the computing side.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ComputeConfig {
    /// Computations at the same time; 0: one a core.
    pub workers: usize,
    /// Computations that may wait.
    pub queue: usize,
    /// Longest wait and computation of one request, seconds.
    pub budget_seconds: u64,
}

impl ComputeConfig {
    /// Longest wait and computation of one request.
    pub fn budget(&self) -> Duration {
        Duration::from_secs(self.budget_seconds)
    }
}

/// Limits of one request's content.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LimitsConfig {
    /// Pairs in one snapshot.
    pub degree_counts: usize,
    /// Thresholds times dates in one forecast.
    pub cells: usize,
}

/// Logging.
#[derive(Debug, Clone, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LogConfig {
    /// Filter directives.
    pub filter: String,
    /// Text or JSON.
    pub format: LogFormat,
}

/// Form of the log lines.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum LogFormat {
    /// For people.
    Text,
    /// For machines.
    Json,
}

/// Why the settings cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum SettingsError {
    /// A file or value is unreadable.
    #[error("{0}")]
    Unreadable(#[from] ConfigError),
    /// A variable belongs to no key.
    #[error("{name} is not a setting; the known ones are {known}")]
    UnknownVariable {
        /// The variable.
        name: String,
        /// The variables that are known.
        known: String,
    },
    /// A value is outside its range.
    #[error("{key} must be at least 1")]
    Zero {
        /// The key.
        key: &'static str,
    },
}

impl Config {
    /// Reads the settings for this process.
    ///
    /// # Errors
    /// An unreadable file, an unknown key or variable, a value of the wrong type or range.
    pub fn load(file: Option<&Path>) -> Result<Self, SettingsError> {
        Self::from_sources(
            file,
            std::env::vars_os().filter_map(|(k, v)| Some((k.into_string().ok()?, v.into_string().ok()?))),
        )
    }

    /// Reads the settings from a file and the given variables.
    ///
    /// # Errors
    /// As [`Self::load`].
    pub fn from_sources(
        file: Option<&Path>,
        variables: impl Iterator<Item = (String, String)>,
    ) -> Result<Self, SettingsError> {
        let defaults = config::Config::builder().add_source(File::from_str(DEFAULTS, FileFormat::Toml)).build()?;
        let keys = variable_keys(&defaults);
        let mut builder = config::Config::builder().add_source(defaults);
        if let Some(path) = file {
            builder = builder.add_source(File::from(path).format(FileFormat::Toml));
        }
        for (name, value) in variables.filter(|(name, _)| name.starts_with(VARIABLE_PREFIX)) {
            let Some(key) = keys.get(&name) else {
                let known = keys.keys().cloned().collect::<Vec<_>>().join(", ");
                return Err(SettingsError::UnknownVariable { name, known });
            };
            builder = builder.set_override(key, value)?;
        }
        builder.build()?.try_deserialize::<Self>()?.checked()
    }

    fn checked(self) -> Result<Self, SettingsError> {
        let positive = [
            ("database.readers", self.database.readers as usize),
            ("http.max_in_flight", self.http.max_in_flight),
            ("http.body_limit_bytes", self.http.body_limit_bytes),
            ("limits.degree_counts", self.limits.degree_counts),
            ("limits.cells", self.limits.cells),
        ];
        match positive.iter().find(|(_, value)| *value == 0) {
            Some(&(key, _)) => Err(SettingsError::Zero { key }),
            None => Ok(self),
        }
    }
}

/// The variable of every key in `defaults`, with the key's dotted path.
fn variable_keys(defaults: &config::Config) -> BTreeMap<String, String> {
    let mut keys = BTreeMap::new();
    collect_keys("", &defaults.cache, &mut keys);
    keys
}

fn collect_keys(path: &str, value: &Value, keys: &mut BTreeMap<String, String>) {
    if let ValueKind::Table(table) = &value.kind {
        for (name, inner) in table {
            let inner_path = if path.is_empty() { name.clone() } else { format!("{path}.{name}") };
            collect_keys(&inner_path, inner, keys);
        }
    } else {
        let variable = format!("{VARIABLE_PREFIX}{}", path.replace('.', "_").to_uppercase());
        keys.insert(variable, path.to_owned());
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn with(variables: &[(&str, &str)]) -> Result<Config, SettingsError> {
        Config::from_sources(None, variables.iter().map(|&(k, v)| (k.to_owned(), v.to_owned())))
    }

    #[test]
    fn defaults_bind_to_loopback() {
        let config = with(&[]).unwrap();
        assert!(config.bind.ip().is_loopback());
        assert_eq!(config.limits.degree_counts, 1_000_000);
    }

    #[test]
    fn a_variable_overrides_its_key() {
        let config = with(&[
            ("TAILCAST_BIND", "127.0.0.1:9"),
            ("TAILCAST_DATABASE_URL", "sqlite://x.db"),
            ("TAILCAST_DATABASE_MIGRATE_ON_START", "false"),
            ("TAILCAST_HTTP_BODY_LIMIT_BYTES", "100"),
            ("TAILCAST_LOG_FORMAT", "json"),
            ("PATH", "ignored"),
        ])
        .unwrap();
        assert_eq!(config.bind.port(), 9);
        assert_eq!(config.database.url, "sqlite://x.db");
        assert!(!config.database.migrate_on_start);
        assert_eq!(config.http.body_limit_bytes, 100);
        assert_eq!(config.log.format, LogFormat::Json);
    }

    #[test]
    fn a_file_overrides_defaults_and_unknown_keys_are_refused() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("settings.toml");
        std::fs::write(&path, "[http]\nmax_in_flight = 3\n").unwrap();
        let config = Config::from_sources(Some(&path), std::iter::empty()).unwrap();
        assert_eq!(config.http.max_in_flight, 3);
        std::fs::write(&path, "[http]\nmax_inflight = 3\n").unwrap();
        let error = Config::from_sources(Some(&path), std::iter::empty()).unwrap_err().to_string();
        assert!(error.contains("max_inflight"), "{error}");
    }

    #[test]
    fn an_unknown_variable_or_a_zero_is_refused() {
        let error = with(&[("TAILCAST_BINDD", "1")]).unwrap_err().to_string();
        assert!(error.contains("TAILCAST_BINDD") && error.contains("TAILCAST_BIND,"), "{error}");
        let error = with(&[("TAILCAST_HTTP_MAX_IN_FLIGHT", "0")]).unwrap_err().to_string();
        assert!(error.contains("http.max_in_flight"), "{error}");
    }
}

//! Settings: the compiled-in defaults, then a file, then `TAILCAST_*` variables; one small struct a concern.

mod access;
mod fault;
mod http;
mod kinds;
mod notices;
mod retention;
mod sources;
mod telemetry;
mod work;

use std::collections::BTreeMap;
use std::net::SocketAddr;
use std::path::Path;
use std::time::Duration;

use config::{File, FileFormat, Value, ValueKind};
use serde::de::Error as _;
use serde::{Deserialize, Deserializer};

pub use access::{AccessConfig, KeysNeeded};
pub use fault::SettingsError;
pub use http::HttpConfig;
pub use notices::NoticesConfig;
pub use retention::RetentionConfig;
pub use sources::SourcesConfig;
pub use telemetry::TelemetryConfig;
pub use work::{ComputeConfig, JobsConfig};

use crate::webhook::SecretFault;

const DEFAULTS: &str = include_str!("../config/default.toml");
/// Most threads or connections: more only wait for each other.
const MOST_THREADS: u64 = 1024;
/// Longest time, seconds: what runs for longer than a day is no request.
const DAY_SECONDS: u64 = 86_400;
/// Most connections: a number below what systems give a process of descriptors at most.
const MOST_CONNECTIONS: u64 = 1_000_000;
const YEAR_HOURS: u64 = 8_766;
/// Longest age that anything is kept to, days: ten years.
const MOST_DAYS: u64 = 3_653;
/// Most of anything counted or measured in bytes.
const MOST_THINGS: u64 = 1 << 40;
/// Most values of one label among the metrics.
const MOST_SERIES: u64 = 100_000;
const VARIABLE_PREFIX: &str = "TAILCAST_";

/// All settings.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Config {
    /// Address and port to listen on.
    #[serde(deserialize_with = "socket_address")]
    pub bind: SocketAddr,
    /// Where runs are kept.
    pub database: DatabaseConfig,
    /// Who may ask.
    pub access: AccessConfig,
    /// Limits of the HTTP side.
    pub http: HttpConfig,
    /// Limits of the computing side.
    pub compute: ComputeConfig,
    /// Work that outlasts its request.
    pub jobs: JobsConfig,
    /// Limits of one request's content.
    pub limits: LimitsConfig,
    /// What is told of forecasts among the metrics.
    pub metrics: MetricsConfig,
    /// Calls to other machines.
    pub notices: NoticesConfig,
    /// Queries in databases of the operator's.
    pub sources: SourcesConfig,
    /// How long what is stored is kept.
    pub retention: RetentionConfig,
    /// Logging.
    pub log: LogConfig,
    /// Traces.
    pub telemetry: TelemetryConfig,
}

/// Where runs are kept and how.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct DatabaseConfig {
    /// `sqlite://FILE` or `postgres://USER@HOST/DATABASE`.
    pub url: String,
    /// Connections that read a file at the same time.
    pub readers: u32,
    /// Connections to a server.
    pub connections: u32,
    /// Longest wait for another process's lock, milliseconds.
    pub busy_timeout_ms: u64,
    /// Longest time that the start spends on looking for damage, milliseconds.
    pub check_on_start_ms: u64,
    /// Whether `serve` brings the tables up to date.
    pub migrate_on_start: bool,
}

impl DatabaseConfig {
    /// Longest time that the start spends on looking for damage.
    pub fn check_on_start(&self) -> Duration {
        Duration::from_millis(self.check_on_start_ms)
    }
}

/// Limits of one request's content.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LimitsConfig {
    /// Pairs in one snapshot.
    pub degree_counts: usize,
    /// Rows in one table of transitions.
    pub transitions: usize,
    /// Ratio classes, windows and cells in one link list's attachment statistics, each.
    pub link_events: usize,
    /// Rows of all the evidence stored of one network.
    pub network_rows: usize,
    /// Thresholds times dates in one forecast; times origins in one backtest.
    pub cells: usize,
}

/// What is told of forecasts among the metrics.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct MetricsConfig {
    /// Networks.
    pub networks: u32,
    /// Thresholds of each.
    pub thresholds: usize,
    /// Limits of each.
    pub limits: usize,
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
#[serde(try_from = "String")]
pub enum LogFormat {
    /// For people.
    Text,
    /// For machines.
    Json,
}

impl TryFrom<String> for LogFormat {
    type Error = String;

    fn try_from(name: String) -> Result<Self, String> {
        match name.as_str() {
            "text" => Ok(Self::Text),
            "json" => Ok(Self::Json),
            _ => Err(format!("log.format is \"text\" or \"json\", not {name:?}")),
        }
    }
}

fn socket_address<'de, D: Deserializer<'de>>(deserializer: D) -> Result<SocketAddr, D::Error> {
    let text = String::deserialize(deserializer)?;
    text.parse().map_err(|_| {
        D::Error::custom(format!("bind is an address and a port, such as 127.0.0.1:8080 or [::1]:8080, not {text:?}"))
    })
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
        let mut builder = config::Config::builder().add_source(defaults.clone());
        if let Some(path) = file {
            let given = config::Config::builder().add_source(File::from(path).format(FileFormat::Toml)).build()?;
            let unknown: Vec<String> =
                variable_keys(&given).into_values().filter(|key| !keys.values().any(|known| known == key)).collect();
            if !unknown.is_empty() {
                let known = keys.values().cloned().collect::<Vec<_>>().join(", ");
                return Err(SettingsError::UnknownKeys { file: path.display().to_string(), keys: unknown, known });
            }
            kinds::check_file(&defaults.cache, &given.cache, "")?;
            builder = builder.add_source(given);
        }
        let (own, others): (Vec<_>, Vec<_>) = variables.partition(|(name, _)| name.starts_with(VARIABLE_PREFIX));
        for (key, value) in telemetry::by_standard_variables(&others) {
            builder = builder.set_override(key, value)?;
        }
        for (name, value) in own {
            let Some(key) = keys.get(&name) else {
                let known = keys.keys().cloned().collect::<Vec<_>>().join(", ");
                return Err(SettingsError::UnknownVariable { name, known });
            };
            kinds::check_text(&defaults.cache, key, &value)?;
            builder = builder.set_override(key, value)?;
        }
        builder.build()?.try_deserialize::<Self>()?.checked()
    }

    fn checked(self) -> Result<Self, SettingsError> {
        let (database, http, compute, limits) = (&self.database, &self.http, &self.compute, &self.limits);
        let (jobs, metrics, notices, retention) = (&self.jobs, &self.metrics, &self.notices, &self.retention);
        if !notices.destinations.is_empty() && notices.secret.is_none() {
            let (key, with) = ("notices.secret", "notices.destinations");
            return Err(SettingsError::Missing { key, with, why: SecretFault.to_string() });
        }
        let ranges = [
            ("database.readers", u64::from(database.readers), 1, MOST_THREADS),
            ("database.connections", u64::from(database.connections), 1, MOST_THREADS),
            ("database.busy_timeout_ms", database.busy_timeout_ms, 0, DAY_SECONDS * 1000),
            ("http.max_connections", http.max_connections as u64, 1, MOST_CONNECTIONS),
            ("database.check_on_start_ms", database.check_on_start_ms, 0, DAY_SECONDS * 1000),
            ("http.body_limit_bytes", http.body_limit_bytes as u64, 1, MOST_THINGS),
            // A body as large as may be must fit into it, with the room in which it grows.
            (
                "http.bodies_bytes",
                http.bodies_bytes as u64,
                (http.body_limit_bytes as u64).saturating_mul(2),
                MOST_THINGS,
            ),
            ("http.answers_bytes", http.answers_bytes as u64, 1, MOST_THINGS),
            ("http.answer_pause_seconds", http.answer_pause_seconds, 1, DAY_SECONDS),
            ("http.head_timeout_seconds", http.head_timeout_seconds, 1, DAY_SECONDS),
            ("http.body_timeout_seconds", http.body_timeout_seconds, 1, DAY_SECONDS),
            ("http.max_in_flight", http.max_in_flight as u64, 1, MOST_THINGS),
            ("http.max_streams", http.max_streams as u64, 0, MOST_THINGS),
            ("http.stream_keep_alive_seconds", http.stream_keep_alive_seconds, 1, DAY_SECONDS),
            ("http.polled_bytes", http.polled_bytes as u64, 0, MOST_THINGS),
            ("http.drain_seconds", http.drain_seconds, 0, DAY_SECONDS),
            ("http.shutdown_grace_seconds", http.shutdown_grace_seconds, 0, DAY_SECONDS),
            ("compute.workers", compute.workers as u64, 0, MOST_THREADS),
            ("compute.queue", compute.queue as u64, 0, MOST_THINGS),
            ("compute.budget_seconds", compute.budget_seconds, 1, DAY_SECONDS),
            ("access.audit_days", self.access.audit_days, 1, MOST_THINGS / DAY_SECONDS),
            ("jobs.workers", jobs.workers as u64, 1, MOST_THREADS),
            ("jobs.refresh_workers", jobs.refresh_workers as u64, 1, MOST_THREADS),
            ("jobs.refresh_seconds", jobs.refresh_seconds, 1, DAY_SECONDS),
            ("jobs.queue", jobs.queue as u64, 0, MOST_THINGS),
            ("jobs.wait_seconds", jobs.wait_seconds, 0, DAY_SECONDS),
            ("jobs.link_list_bytes", jobs.link_list_bytes, 1, MOST_THINGS),
            ("jobs.link_list_seconds", jobs.link_list_seconds, 1, DAY_SECONDS),
            ("jobs.link_list_nodes", jobs.link_list_nodes, 1, MOST_THINGS),
            ("metrics.networks", u64::from(metrics.networks), 0, MOST_SERIES),
            ("metrics.thresholds", metrics.thresholds as u64, 0, MOST_SERIES),
            ("metrics.limits", metrics.limits as u64, 0, MOST_SERIES),
            ("limits.degree_counts", limits.degree_counts as u64, 1, MOST_THINGS),
            ("limits.transitions", limits.transitions as u64, 1, MOST_THINGS),
            ("limits.link_events", limits.link_events as u64, 1, MOST_THINGS),
            ("limits.network_rows", limits.network_rows as u64, 1, MOST_THINGS),
            ("limits.cells", limits.cells as u64, 1, MOST_THINGS),
            ("telemetry.timeout_seconds", self.telemetry.timeout_seconds, 1, 300),
            ("retention.forecasts_days", retention.forecasts_days, 0, MOST_DAYS),
            ("retention.forecasts_most", retention.forecasts_most, 0, MOST_THINGS),
            ("retention.fits_days", retention.fits_days, 0, MOST_DAYS),
            ("retention.fits_most", retention.fits_most, 0, MOST_THINGS),
            ("retention.issued_days", retention.issued_days, 0, MOST_DAYS),
            ("retention.backtests_days", retention.backtests_days, 0, MOST_DAYS),
            ("retention.backtests_most", retention.backtests_most, 0, MOST_THINGS),
            ("retention.jobs_days", retention.jobs_days, 0, MOST_DAYS),
            ("retention.jobs_most", retention.jobs_most, 0, MOST_THINGS),
            ("retention.keys_hours", retention.keys_hours, 1, YEAR_HOURS),
            ("retention.every_seconds", retention.every_seconds, 1, DAY_SECONDS),
            ("sources.least_every_seconds", self.sources.least_every_seconds, 1, DAY_SECONDS),
            ("sources.longest_timeout_seconds", self.sources.longest_timeout_seconds, 1, DAY_SECONDS),
            ("sources.first_pause_ms", self.sources.first_pause_ms, 1, DAY_SECONDS * 1000),
            ("sources.longest_pause_seconds", self.sources.longest_pause_seconds, 1, DAY_SECONDS),
            ("notices.attempts_for_hours", notices.attempts_for_hours, 1, YEAR_HOURS),
            ("notices.timeout_seconds", notices.timeout_seconds, 1, 300),
            ("notices.first_pause_ms", notices.first_pause_ms, 1, DAY_SECONDS * 1000),
            ("notices.longest_pause_seconds", notices.longest_pause_seconds, 1, DAY_SECONDS),
        ];
        match ranges.into_iter().find(|&(_, value, least, most)| !(least..=most).contains(&value)) {
            Some((key, value, least, most)) => Err(SettingsError::OutOfRange { key, value, least, most }),
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
        std::fs::write(&path, "colour = 1\n[http]\nmax_inflight = 3\n").unwrap();
        let error = Config::from_sources(Some(&path), std::iter::empty()).unwrap_err().to_string();
        assert!(error.contains("colour, http.max_inflight;"), "{error}");
    }

    #[test]
    fn a_value_of_another_kind_is_refused_not_cast() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("settings.toml");
        for (line, words) in [
            ("wait_seconds = -3.0", "jobs.wait_seconds must be a whole number that is not negative, not -3"),
            ("wait_seconds = 3.7", "not 3.7"),
            ("wait_seconds = true", "not true"),
            ("wait_seconds = -3", "not -3"),
            ("wait_seconds = \"7\"", "not 7"),
        ] {
            std::fs::write(&path, format!("[jobs]\n{line}\n")).unwrap();
            let error = Config::from_sources(Some(&path), std::iter::empty()).unwrap_err().to_string();
            assert!(error.contains(words), "{line}: {error}");
        }
        std::fs::write(&path, "[database]\nmigrate_on_start = 1\n").unwrap();
        let error = Config::from_sources(Some(&path), std::iter::empty()).unwrap_err().to_string();
        assert!(error.contains("database.migrate_on_start must be true or false, not 1"), "{error}");
        for (name, value) in [
            ("TAILCAST_JOBS_WAIT_SECONDS", "3.7"),
            ("TAILCAST_JOBS_WAIT_SECONDS", "true"),
            ("TAILCAST_JOBS_WAIT_SECONDS", ""),
            ("TAILCAST_DATABASE_MIGRATE_ON_START", "2"),
        ] {
            let error = with(&[(name, value)]).unwrap_err().to_string();
            assert!(error.contains("must be"), "{name} = {value}: {error}");
        }
    }

    #[test]
    fn an_unknown_variable_or_a_value_out_of_range_is_refused() {
        let error = with(&[("TAILCAST_BINDD", "1")]).unwrap_err().to_string();
        assert!(error.contains("TAILCAST_BINDD") && error.contains("TAILCAST_BIND,"), "{error}");
        for (name, value, words) in [
            ("TAILCAST_HTTP_MAX_IN_FLIGHT", "0", "http.max_in_flight must lie between 1"),
            ("TAILCAST_COMPUTE_WORKERS", "1025", "between 0 and 1024"),
            ("TAILCAST_COMPUTE_BUDGET_SECONDS", "0", "compute.budget_seconds must lie between 1 and 86400"),
            ("TAILCAST_COMPUTE_BUDGET_SECONDS", "86401", "not at 86401"),
            ("TAILCAST_LOG_FORMAT", "yaml", "\"text\" or \"json\", not \"yaml\""),
            ("TAILCAST_BIND", "foo", "such as 127.0.0.1:8080"),
        ] {
            let error = with(&[(name, value)]).unwrap_err().to_string();
            assert!(error.contains(words), "{name} = {value}: {error}");
        }
    }
}

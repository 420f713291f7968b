//! Settings of traces, and the standard variables that set them too.

use std::time::Duration;

use serde::de::Error as _;
use serde::{Deserialize, Deserializer};
use url::Url;

/// Variables of the OpenTelemetry specification, and the keys that they stand for.
const STANDARD_VARIABLES: [(&str, &str); 3] = [
    ("OTEL_EXPORTER_OTLP_ENDPOINT", ENDPOINT),
    ("OTEL_SERVICE_NAME", "telemetry.service_name"),
    ("OTEL_TRACES_SAMPLER_ARG", "telemetry.sampling_ratio"),
];
const ENDPOINT: &str = "telemetry.otlp_endpoint";
const SDK_DISABLED: &str = "OTEL_SDK_DISABLED";

/// Traces.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct TelemetryConfig {
    /// Address of a collector that takes OTLP over HTTP; empty: no traces.
    #[serde(deserialize_with = "endpoint")]
    pub otlp_endpoint: String,
    /// Share of the traces begun here that are kept, 0 to 1.
    #[serde(deserialize_with = "ratio")]
    pub sampling_ratio: f64,
    /// What the service is called among others.
    pub service_name: String,
    /// Longest time to send one batch, seconds.
    pub timeout_seconds: u64,
}

impl TelemetryConfig {
    /// Longest time to send one batch.
    pub fn timeout(&self) -> Duration {
        Duration::from_secs(self.timeout_seconds)
    }
}

/// The keys that the standard variables set, in order. An empty variable is as good as none (OpenTelemetry specification,
/// "Environment Variable Specification", Parsing empty value).
pub fn by_standard_variables(variables: &[(String, String)]) -> Vec<(&'static str, String)> {
    let given = |wanted: &str| {
        let found = variables.iter().find(|(name, value)| name == wanted && !value.is_empty());
        found.map(|(_, value)| value.clone())
    };
    let mut set: Vec<_> =
        STANDARD_VARIABLES.into_iter().filter_map(|(name, key)| given(name).map(|value| (key, value))).collect();
    if given(SDK_DISABLED).is_some_and(|value| value.eq_ignore_ascii_case("true")) {
        set.push((ENDPOINT, String::new()));
    }
    set
}

fn endpoint<'de, D: Deserializer<'de>>(deserializer: D) -> Result<String, D::Error> {
    let text = String::deserialize(deserializer)?;
    let usable = |url: Url| ["http", "https"].contains(&url.scheme()) && url.has_host() && url.query().is_none();
    if text.is_empty() || text.parse().is_ok_and(usable) {
        return Ok(text);
    }
    // Not repeated: it may hold a password.
    Err(D::Error::custom(
        "telemetry.otlp_endpoint (or OTEL_EXPORTER_OTLP_ENDPOINT) is an address of http or https, such as http://127.0.0.1:4318",
    ))
}

fn ratio<'de, D: Deserializer<'de>>(deserializer: D) -> Result<f64, D::Error> {
    let ratio = f64::deserialize(deserializer)?;
    match (0.0..=1.0).contains(&ratio) {
        true => Ok(ratio),
        false => Err(D::Error::custom(format!("telemetry.sampling_ratio lies between 0 and 1, not at {ratio}"))),
    }
}

#[cfg(test)]
mod tests {
    use crate::config::Config;

    fn with(variables: &[(&str, &str)]) -> Result<Config, String> {
        let variables = variables.iter().map(|&(name, value)| (name.to_owned(), value.to_owned()));
        Config::from_sources(None, variables).map_err(|error| error.to_string())
    }

    #[test]
    fn traces_are_off_by_default() {
        assert_eq!(with(&[]).unwrap().telemetry.otlp_endpoint, "");
        assert_eq!(with(&[("OTEL_EXPORTER_OTLP_ENDPOINT", "")]).unwrap().telemetry.otlp_endpoint, "");
    }

    #[test]
    fn standard_variables_set_keys_and_own_variables_go_before() {
        let found = with(&[
            ("TAILCAST_TELEMETRY_SERVICE_NAME", "forecasts"),
            ("OTEL_SERVICE_NAME", "other"),
            ("OTEL_EXPORTER_OTLP_ENDPOINT", "http://127.0.0.1:4318"),
            ("OTEL_TRACES_SAMPLER_ARG", "0.25"),
        ]);
        let telemetry = found.unwrap().telemetry;
        assert_eq!((telemetry.service_name.as_str(), telemetry.sampling_ratio), ("forecasts", 0.25));
        assert_eq!(telemetry.otlp_endpoint, "http://127.0.0.1:4318");
        let off = with(&[("OTEL_EXPORTER_OTLP_ENDPOINT", "http://127.0.0.1:4318"), ("OTEL_SDK_DISABLED", "TRUE")]);
        assert_eq!(off.unwrap().telemetry.otlp_endpoint, "");
    }

    #[test]
    fn what_cannot_be_used_is_refused() {
        for (name, value, words) in [
            ("TAILCAST_TELEMETRY_OTLP_ENDPOINT", "127.0.0.1:4318", "such as http://"),
            ("OTEL_EXPORTER_OTLP_ENDPOINT", "grpc://collector:4317", "such as http://"),
            ("TAILCAST_TELEMETRY_SAMPLING_RATIO", "1.5", "between 0 and 1, not at 1.5"),
            ("TAILCAST_TELEMETRY_TIMEOUT_SECONDS", "0", "between 1 and 300"),
        ] {
            let error = with(&[(name, value)]).unwrap_err();
            assert!(error.contains(words), "{name}: {error}");
        }
    }
}

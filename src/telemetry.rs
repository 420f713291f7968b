//! Logs, traces and metrics of the process.

mod traces;

use std::borrow::Cow;
use std::io::{self, IsTerminal, Write};
use std::sync::OnceLock;
use std::time::Duration;

use metrics::{Unit, describe_counter, describe_gauge, describe_histogram, gauge};
use metrics_exporter_prometheus::{BuildError, PrometheusBuilder, PrometheusHandle};
use opentelemetry_otlp::ExporterBuildError;
use tracing_subscriber::filter::{EnvFilter, LevelFilter, ParseError, Targets};
use tracing_subscriber::layer::SubscriberExt;
use tracing_subscriber::util::SubscriberInitExt;
use tracing_subscriber::{Layer, Registry, fmt, registry};

use crate::config::{LogConfig, LogFormat, TelemetryConfig};
use crate::credential::masked;
pub use traces::{SPANS, Traces};

/// Bounds of the time buckets, seconds: a polled read takes under a millisecond, a large forecast seconds.
const SECONDS_BUCKETS: [f64; 13] = [0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 5.0, 30.0];
/// How often samples are folded into their buckets, so that they do not pile up when nobody scrapes.
const UPKEEP_INTERVAL: Duration = Duration::from_secs(5);

static METRICS: OnceLock<Result<PrometheusHandle, String>> = OnceLock::new();

/// Why logs or traces cannot be written as configured.
#[derive(Debug, thiserror::Error)]
pub enum StartError {
    /// The filter cannot be read.
    #[error("log.filter: {0}")]
    Filter(#[from] ParseError),
    /// Traces cannot be sent as configured.
    #[error("telemetry.otlp_endpoint, or a variable OTEL_*: {0}")]
    Traces(#[from] ExporterBuildError),
}

/// Sends logs to the standard error stream, and traces to the collector where one is configured. A second call in one process changes
/// nothing.
///
/// # Errors
/// When the filter or the collector's address cannot be read.
pub fn start(log: &LogConfig, telemetry: &TelemetryConfig) -> Result<Traces, StartError> {
    let filter = EnvFilter::builder().parse(&log.filter)?.add_directive(format!("{SPANS}=off").parse()?);
    let traces = Traces::new(telemetry)?;
    let colours = io::stderr().is_terminal();
    let _already_started = match traces.tracer() {
        // One filter over everything costs less than one a layer, and polls would pay for it.
        None => {
            let lines = fmt().with_env_filter(filter).with_writer(|| Masking(io::stderr())).with_ansi(colours);
            match log.format {
                LogFormat::Text => lines.try_init(),
                LogFormat::Json => lines.json().flatten_event(true).try_init(),
            }
            .is_ok()
        }
        Some(tracer) => {
            let lines = fmt::layer().with_writer(|| Masking(io::stderr())).with_ansi(colours);
            let lines: Box<dyn Layer<Registry> + Send + Sync> = match log.format {
                LogFormat::Text => lines.boxed(),
                LogFormat::Json => lines.json().flatten_event(true).boxed(),
            };
            let spans = tracing_opentelemetry::layer()
                .with_tracer(tracer)
                .with_location(false)
                .with_threads(false)
                .with_tracked_inactivity(false)
                .with_target(false)
                .with_level(false)
                .with_context_activation(false)
                .with_filter(Targets::new().with_target(SPANS, LevelFilter::INFO));
            registry().with(lines.with_filter(filter)).with(spans).try_init().is_ok()
        }
    };
    Ok(traces)
}

/// The process's metrics; the first call starts collecting.
///
/// # Errors
/// When another collector was installed before.
pub fn start_metrics() -> Result<PrometheusHandle, String> {
    METRICS.get_or_init(|| install().map_err(|error| error.to_string())).clone()
}

/// Folds samples into their buckets, for ever.
pub async fn keep_metrics_small(handle: PrometheusHandle) {
    let mut interval = tokio::time::interval(UPKEEP_INTERVAL);
    loop {
        interval.tick().await;
        handle.run_upkeep();
    }
}

/// Writes a line of the log, with the secret part of every access key in it left out, whoever put it there.
struct Masking<W>(W);

impl<W: Write> Write for Masking<W> {
    fn write(&mut self, line: &[u8]) -> io::Result<usize> {
        match std::str::from_utf8(line).map(masked) {
            Ok(Cow::Owned(safe)) => self.0.write_all(safe.as_bytes())?,
            _ => self.0.write_all(line)?,
        }
        Ok(line.len())
    }

    fn flush(&mut self) -> io::Result<()> {
        self.0.flush()
    }
}

fn install() -> Result<PrometheusHandle, BuildError> {
    let handle = PrometheusBuilder::new().set_buckets(&SECONDS_BUCKETS)?.install_recorder()?;
    describe_counter!("tailcast_http_requests_total", "Requests answered, by method, route and status");
    describe_histogram!("tailcast_http_request_seconds", Unit::Seconds, "Time from request to response");
    describe_gauge!("tailcast_http_connections", "Open connections");
    describe_histogram!("tailcast_compute_seconds", Unit::Seconds, "Time on a worker");
    describe_histogram!("tailcast_compute_wait_seconds", Unit::Seconds, "Time spent waiting for a worker");
    describe_gauge!("tailcast_compute_busy", "Computations that run or wait");
    describe_counter!(
        "tailcast_notices_total",
        "Attempts to send a notice's event, by outcome: delivered, failed, given_up"
    );
    describe_counter!("tailcast_source_runs_total", "Runs of sources, by outcome: succeeded, failed");
    describe_counter!(
        "tailcast_trace_exports_total",
        "Batches of spans sent to the collector, by outcome: delivered, failed"
    );
    describe_gauge!("tailcast_database_bytes", Unit::Bytes, "The database file");
    describe_gauge!("tailcast_database_log_bytes", Unit::Bytes, "The database's write-ahead log");
    describe_gauge!("tailcast_database_free_bytes", Unit::Bytes, "Pages of the database file that hold nothing");
    describe_gauge!("tailcast_database_rows", "Rows of the main tables");
    describe_gauge!("tailcast_spool_bytes", Unit::Bytes, "Link lists that wait to be counted");
    describe_gauge!("tailcast_disk_free_bytes", Unit::Bytes, "Free space on the database's disk");
    describe_counter!("tailcast_retention_removed_total", "What retention removed, by kind");
    describe_gauge!("tailcast_build_info", "1, with the version as a label");
    gauge!("tailcast_build_info", "version" => env!("CARGO_PKG_VERSION")).set(1.0);
    Ok(handle)
}

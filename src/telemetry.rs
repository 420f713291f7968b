//! Logs and metrics of the process.

use std::borrow::Cow;
use std::io::{self, IsTerminal, Write};
use std::sync::OnceLock;
use std::time::Duration;

use metrics::{Unit, describe_counter, describe_gauge, describe_histogram, gauge};
use metrics_exporter_prometheus::{BuildError, PrometheusBuilder, PrometheusHandle};
use tracing_subscriber::EnvFilter;
use tracing_subscriber::filter::ParseError;

use crate::config::{LogConfig, LogFormat};
use crate::credential::masked;

/// Bounds of the time buckets, seconds: a polled read takes under a millisecond, a large forecast seconds.
const SECONDS_BUCKETS: [f64; 13] = [0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 5.0, 30.0];
/// How often samples are folded into their buckets, so that they do not pile up when nobody scrapes.
const UPKEEP_INTERVAL: Duration = Duration::from_secs(5);

static METRICS: OnceLock<Result<PrometheusHandle, String>> = OnceLock::new();

/// Sends logs to the standard error stream. A second call in one process changes nothing.
///
/// # Errors
/// When the filter cannot be read.
pub fn start_logs(config: &LogConfig) -> Result<(), ParseError> {
    let filter = EnvFilter::builder().parse(&config.filter)?;
    let builder = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(|| Masking(io::stderr()))
        .with_ansi(io::stderr().is_terminal());
    let _already_started = match config.format {
        LogFormat::Text => builder.try_init(),
        LogFormat::Json => builder.json().flatten_event(true).try_init(),
    };
    Ok(())
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
    describe_histogram!("tailcast_compute_seconds", Unit::Seconds, "Time on a worker");
    describe_histogram!("tailcast_compute_wait_seconds", Unit::Seconds, "Time spent waiting for a worker");
    describe_gauge!("tailcast_compute_busy", "Computations that run or wait");
    describe_counter!(
        "tailcast_notices_total",
        "Attempts to send a notice's event, by outcome: delivered, failed, given_up"
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

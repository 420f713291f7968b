//! Traces: spans of the target [`SPANS`], sent in batches to a collector (OTLP over HTTP, protobuf).
//!
//! A span that ends goes into a bounded queue, and a thread of its own sends what lies there: a collector that is slow or away costs
//! spans, never a request. Limits of queue and batch are the standard `OTEL_BSP_*` variables', or the library's.

use std::fmt;
use std::time::Duration;

use async_trait::async_trait;
use metrics::counter;
use opentelemetry::trace::TracerProvider;
use opentelemetry::{KeyValue, Value};
use opentelemetry_http::{Bytes, HttpClient, HttpError, Request, Response};
use opentelemetry_otlp::{ExporterBuildError, SpanExporter, WithExportConfig, WithHttpConfig};
use opentelemetry_sdk::Resource;
use opentelemetry_sdk::trace::{Sampler, SdkTracer, SdkTracerProvider};

use crate::config::TelemetryConfig;

/// Target of the spans that traces are made of. Log lines do not show them, and traces show no others: what a caller named stays in the log.
pub const SPANS: &str = "tailcast::traces";
/// Longest time to send what is left at the end.
const LAST_BATCH: Duration = Duration::from_secs(5);
/// What is read of a collector's answer.
const MOST_ANSWER_BYTES: u64 = 65_536;
const INSTRUMENTATION: &str = env!("CARGO_PKG_NAME");

/// Sends spans until it is ended.
#[derive(Debug, Clone)]
pub struct Traces {
    provider: Option<SdkTracerProvider>,
}

impl Traces {
    /// Nothing is sent where no collector is configured.
    ///
    /// # Errors
    /// When the collector's address, or a standard variable, cannot be used.
    pub fn new(config: &TelemetryConfig) -> Result<Self, ExporterBuildError> {
        if config.otlp_endpoint.is_empty() {
            return Ok(Self { provider: None });
        }
        let exporter = SpanExporter::builder()
            .with_http()
            .with_http_client(Client::new(config.timeout()))
            .with_endpoint(format!("{}/v1/traces", config.otlp_endpoint.trim_end_matches('/')))
            .with_timeout(config.timeout())
            .build()?;
        let resource = Resource::builder()
            .with_service_name(config.service_name.clone())
            .with_attributes([
                KeyValue::new("service.version", env!("CARGO_PKG_VERSION")),
                // Tells replicas apart.
                KeyValue::new("service.instance.id", Value::from(uuid::Uuid::now_v7().to_string())),
            ])
            .build();
        let sampler = Sampler::ParentBased(Box::new(Sampler::TraceIdRatioBased(config.sampling_ratio)));
        let provider = SdkTracerProvider::builder()
            .with_batch_exporter(exporter)
            .with_sampler(sampler)
            .with_resource(resource)
            .build();
        Ok(Self { provider: Some(provider) })
    }

    /// What makes spans, where they are sent at all.
    pub fn tracer(&self) -> Option<SdkTracer> {
        self.provider.as_ref().map(|provider| provider.tracer(INSTRUMENTATION))
    }

    /// Sends what is left, for a bounded time.
    pub fn end(self) {
        if let Some(provider) = self.provider
            && let Err(error) = provider.shutdown_with_timeout(LAST_BATCH)
        {
            tracing::warn!(%error, "the last traces were not sent");
        }
    }
}

/// The blocking client, on the exporter's own thread.
struct Client(ureq::Agent);

impl Client {
    fn new(patience: Duration) -> Self {
        let settings = ureq::Agent::config_builder()
            .proxy(None)
            .max_redirects(0)
            .http_status_as_error(false)
            .timeout_global(Some(patience));
        Self(ureq::Agent::new_with_config(settings.build()))
    }

    fn send(&self, request: Request<Bytes>) -> Result<Response<Bytes>, ureq::Error> {
        let (head, body) = self.0.run(request.map(|body| body.to_vec()))?.into_parts();
        let bytes = body.into_with_config().limit(MOST_ANSWER_BYTES).read_to_vec()?;
        Ok(Response::from_parts(head, Bytes::from(bytes)))
    }
}

impl fmt::Debug for Client {
    fn fmt(&self, formatter: &mut fmt::Formatter<'_>) -> fmt::Result {
        formatter.write_str("Client")
    }
}

#[async_trait]
impl HttpClient for Client {
    async fn send_bytes(&self, request: Request<Bytes>) -> Result<Response<Bytes>, HttpError> {
        let answer = self.send(request);
        let taken = matches!(&answer, Ok(response) if response.status().is_success());
        counter!("tailcast_trace_exports_total", "outcome" => if taken { "delivered" } else { "failed" }).increment(1);
        Ok(answer?)
    }
}

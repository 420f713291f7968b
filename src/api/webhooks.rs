//! The call that notices make, as the document says it.

use utoipa::OpenApi as _;
use utoipa::openapi::OpenApi;

use crate::service::EventAnswer;

#[derive(utoipa::OpenApi)]
#[openapi(paths(notice))]
struct Webhooks;

/// An event of a notice
///
/// What the service POSTs to the address of a notice. `webhook-signature` is `v1,` and the base64 of the HMAC-SHA256, by the shared
/// secret, of `webhook-id`, `webhook-timestamp` and the body as it came, joined by full stops. Check it, and that the time is near,
/// before you read the body.
#[utoipa::path(
    post,
    path = "notice",
    tag = "networks",
    params(
        ("webhook-id" = String, Header, description = "The event's id: the same when it comes again"),
        ("webhook-timestamp" = i64, Header, description = "When this attempt was made, seconds since 1970"),
        ("webhook-signature" = String, Header, description = "`v1,` and the base64 of the signature"),
    ),
    request_body(content = EventAnswer, content_type = "application/cloudevents+json"),
    responses(
        (status = "2XX", description = "Taken: it is not sent again"),
        (status = "default", description = "Not taken: it is sent again, later and later. Redirections are not followed"),
    )
)]
#[expect(dead_code, reason = "it carries the annotation alone: the handler is the receiver's")]
fn notice() {}

/// Adds the calls that this service makes.
pub fn with_webhooks(mut document: OpenApi) -> OpenApi {
    let calls = Webhooks::openapi();
    let schemas = calls.components.map(|components| components.schemas).unwrap_or_default();
    document.components.get_or_insert_default().schemas.extend(schemas);
    document.webhooks = Some(calls.paths);
    document
}

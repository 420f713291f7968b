//! What the OpenAPI document says of access: how a key is sent, what each operation asks of it, how it is turned away.

use utoipa::openapi::header::HeaderBuilder;
use utoipa::openapi::path::Operation;
use utoipa::openapi::security::{HttpAuthScheme, HttpBuilder, SecurityRequirement, SecurityScheme};
use utoipa::openapi::{ContentBuilder, OpenApi, PathItem, Ref, Response, ResponseBuilder};

use super::rules::{Need, RULES, Reach};

/// The scheme's name in the document.
const SCHEME: &str = "access_key";

/// The document with the rules of access.
pub fn with_access(mut document: OpenApi) -> OpenApi {
    let scheme = HttpBuilder::new().scheme(HttpAuthScheme::Bearer).bearer_format("tailcast_…").description(Some(
        "An access key, where the service asks for keys (access.keys in its settings). A key of scope write reads too, and one of \
         scope admin does both.",
    ));
    if let Some(components) = document.components.as_mut() {
        components.add_security_scheme(SCHEME, SecurityScheme::Http(scheme.build()));
    }
    for rule in RULES {
        let Need::Key(scope, reach) = rule.need else { continue };
        let operation = document.paths.paths.get_mut(rule.path).and_then(|item| operation(item, rule.method));
        let Some(operation) = operation else { continue };
        operation.security = Some(vec![SecurityRequirement::new(SCHEME, [scope.as_str()])]);
        let said = format!("Access: a key of scope `{}`{}.", scope.as_str(), bound(reach));
        let before = operation.description.take().filter(|text| !text.is_empty());
        operation.description = Some(before.map_or(said.clone(), |text| format!("{text}\n\n{said}")));
        for (status, response) in refusals() {
            operation.responses.responses.entry(status.to_owned()).or_insert_with(|| response.into());
        }
    }
    document
}

fn bound(reach: Reach) -> &'static str {
    match reach {
        Reach::Network => "; one that is bound to networks opens only those",
        Reach::Thing(_) => "; for one that is bound to networks, what belongs to none of them is not there",
        Reach::Listed => "; one that is bound to networks is told only of what belongs to them",
        Reach::Beyond => ", not bound to networks",
    }
}

fn operation<'a>(item: &'a mut PathItem, method: &str) -> Option<&'a mut Operation> {
    match method {
        "GET" => item.get.as_mut(),
        "PUT" => item.put.as_mut(),
        "POST" => item.post.as_mut(),
        "DELETE" => item.delete.as_mut(),
        _ => None,
    }
}

fn refusals() -> [(&'static str, Response); 3] {
    let problem = |description: &str, headers: &[(&str, &str)]| {
        let content = ContentBuilder::new().schema(Some(Ref::from_schema_name("Problem"))).build();
        let response = ResponseBuilder::new().description(description).content("application/problem+json", content);
        let with = headers.iter().fold(response, |response, &(name, says)| {
            response.header(name, HeaderBuilder::new().description(Some(says)).build())
        });
        with.build()
    };
    let challenge = ("WWW-Authenticate", "What is missing (RFC 6750)");
    [
        ("401", problem("No access key, or one that opens nothing", &[challenge])),
        ("403", problem("The access key does not allow this", &[challenge])),
        (
            "429",
            problem(
                "The access key's requests of the minute or of the day are used up",
                &[
                    ("Retry-After", "Seconds until there are more"),
                    ("RateLimit-Policy", "The key's limits: requests `q` in `w` seconds"),
                    ("RateLimit", "How they stand: requests left `r`, seconds `t` until there are more"),
                ],
            ),
        ),
    ]
}

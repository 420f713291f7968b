//! How operations fail, as the document says it: sets of problems that many operations share.

use std::collections::BTreeMap;

use utoipa::IntoResponses;
use utoipa::openapi::{ContentBuilder, Ref, RefOr, Response, ResponseBuilder};

type Responses = BTreeMap<String, RefOr<Response>>;

/// How every operation on what is kept can fail.
pub struct Refusals;

/// How reading a representation can fail besides.
pub struct FormRefusals;

/// How reading a chart can fail besides.
pub struct ChartRefusals;

/// How reading a body can fail besides.
pub struct BodyRefusals;

/// How a conditional change can fail besides.
pub struct ConditionRefusals;

impl IntoResponses for Refusals {
    fn responses() -> Responses {
        problems(&[
            (400, "A part of the request is wrong; errors lists each with its place"),
            (404, "There is no such thing, or no such network"),
            (500, "A fault of ours"),
            (503, "Too busy or too slow; Retry-After says when to try again"),
        ])
    }
}

impl IntoResponses for FormRefusals {
    fn responses() -> Responses {
        problems(&[(406, "No acceptable form")])
    }
}

impl IntoResponses for ChartRefusals {
    fn responses() -> Responses {
        problems(&[(422, "It has nothing of what the chart shows; the detail says what would help")])
    }
}

impl IntoResponses for BodyRefusals {
    fn responses() -> Responses {
        problems(&[
            (408, "The body came too slowly"),
            (413, "The body is too large"),
            (415, "The body is not announced in a form that is read, or is compressed"),
        ])
    }
}

impl IntoResponses for ConditionRefusals {
    fn responses() -> Responses {
        problems(&[(412, "What stands there is not what If-Match or If-None-Match asks for")])
    }
}

fn problems(statuses: &[(u16, &str)]) -> Responses {
    let problem = |description: &str| {
        let content = ContentBuilder::new().schema(Some(Ref::from_schema_name("Problem"))).build();
        ResponseBuilder::new().description(description).content("application/problem+json", content).build().into()
    };
    statuses.iter().map(|&(status, description)| (status.to_string(), problem(description))).collect()
}

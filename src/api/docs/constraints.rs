//! What a body or a parameter may be beyond what its type says: put into the document in one place, wherever it stands.

use serde_json::{Value, json};
use utoipa::openapi::path::{Operation, ParameterIn};
use utoipa::openapi::schema::{AdditionalProperties, ArrayItems, KnownFormat, SchemaFormat};
use utoipa::openapi::{OpenApi, RefOr, Schema};

/// What a name looks like; `NetworkName` and its like read it.
const NAME: &str = "[A-Za-z0-9][A-Za-z0-9._~-]*";
const MOST_NAME_CHARS: usize = 100;

/// The document with all of them.
pub fn with_constraints(document: OpenApi) -> OpenApi {
    with_whole_numbers(with_bodies_left_out(with_parameter_forms(with_exclusive_fields(document))))
}

/// Says which fields exclude each other, in the one form that can be put beside properties: exactly one of them is
/// required.
fn with_exclusive_fields(mut document: OpenApi) -> OpenApi {
    let Some(components) = document.components.as_mut() else { return document };
    let exclusive = [
        ("ForecastRequestBody", vec!["dates", "horizon"]),
        ("ArrivalsBody", vec!["per_day", "segments", "csv"]),
        ("HorizonBody", vec!["until", "ends_after"]),
    ];
    // Neither is required where a plan has dates.
    if let Some(RefOr::T(Schema::Object(body))) = components.schemas.get_mut("NetworkForecastBody") {
        let both = json!({"required": ["dates", "horizon"]});
        body.extensions.get_or_insert_default().insert("not".to_owned(), both);
    }
    for (name, fields) in exclusive {
        if let Some(RefOr::T(Schema::Object(body))) = components.schemas.get_mut(name) {
            let one_of: Vec<_> = fields.iter().map(|field| json!({"required": [field]})).collect();
            body.extensions.get_or_insert_default().insert("oneOf".to_owned(), one_of.into());
        }
    }
    if let Some(RefOr::T(Schema::Object(body))) = components.schemas.get_mut("ChangeBody") {
        body.min_properties = Some(1);
        let pairs = [["arrivals", "arrivals_factor"], ["links_per_arrival", "links_factor"]];
        let both: Vec<_> = pairs.iter().map(|pair| json!({"required": pair})).collect();
        body.extensions.get_or_insert_default().insert("not".to_owned(), json!({"anyOf": both}));
    }
    document
}

/// Says of what form the parameters are whose type is just text.
fn with_parameter_forms(mut document: OpenApi) -> OpenApi {
    for parameter in operations(&mut document).flat_map(|operation| operation.parameters.iter_mut().flatten()) {
        let RefOr::T(parameter) = parameter else { continue };
        let form = parameter_form(&parameter.parameter_in, &parameter.name);
        if let Some(form) = form.and_then(|form| serde_json::from_value(form).ok()) {
            parameter.schema = Some(form);
        }
    }
    document
}

fn parameter_form(place: &ParameterIn, name: &str) -> Option<Value> {
    let text = |pattern: String| Some(json!({"type": "string", "pattern": pattern}));
    match (place, name) {
        (ParameterIn::Path, "name" | "limit" | "scenario" | "notice") => {
            Some(json!({"type": "string", "pattern": format!("^{NAME}$"), "maxLength": MOST_NAME_CHARS}))
        }
        (ParameterIn::Path, "as_of" | "from" | "to") | (ParameterIn::Query, "since" | "until") => {
            let form = |format| json!({"type": "string", "format": format});
            Some(json!({"anyOf": [form("date"), form("date-time")]}))
        }
        (ParameterIn::Query, "scenarios") => text(format!("^{NAME}(,{NAME})*$")),
        (ParameterIn::Query, "thresholds") => text("^[1-9][0-9]{0,14}(,[1-9][0-9]{0,14})*$".to_owned()),
        (ParameterIn::Query, "every") => Some(json!({"type": "string", "format": "duration"})),
        (ParameterIn::Header, "Content-Encoding") => Some(json!({"type": "string", "enum": ["gzip", "identity"]})),
        _ => None,
    }
}

/// A body that may be left out is not a null one.
fn with_bodies_left_out(mut document: OpenApi) -> OpenApi {
    let bodies = operations(&mut document).filter_map(|operation| match operation.request_body.as_mut() {
        Some(RefOr::T(body)) => Some(body),
        _ => None,
    });
    for content in bodies.flat_map(|body| body.content.values_mut()) {
        let RefOr::T(content) = content else { continue };
        let Some(RefOr::T(Schema::OneOf(either))) = &content.schema else { continue };
        let named = either.items.iter().find(|item| matches!(item, RefOr::Ref(_))).cloned();
        content.schema = named.or_else(|| content.schema.take());
    }
    document
}

fn operations(document: &mut OpenApi) -> impl Iterator<Item = &mut Operation> {
    document.paths.paths.values_mut().flat_map(|item| {
        [&mut item.get, &mut item.put, &mut item.post, &mut item.delete].into_iter().filter_map(Option::as_mut)
    })
}

/// Takes away `int64`, which stands beside whole numbers that may be as large as 2^64 − 1.
fn with_whole_numbers(mut document: OpenApi) -> OpenApi {
    for operation in operations(&mut document) {
        let schemas = operation.parameters.iter_mut().flatten().filter_map(|parameter| match parameter {
            RefOr::T(parameter) => parameter.schema.as_mut(),
            RefOr::Ref(_) => None,
        });
        schemas.for_each(unsigned);
    }
    if let Some(components) = document.components.as_mut() {
        components.schemas.values_mut().for_each(unsigned);
    }
    document
}

fn unsigned(schema: &mut RefOr<Schema>) {
    if let RefOr::T(schema) = schema {
        unsigned_itself(schema);
    }
}

fn unsigned_itself(schema: &mut Schema) {
    match schema {
        Schema::Object(object) => {
            if object.format == Some(SchemaFormat::KnownFormat(KnownFormat::Int64)) {
                object.format = None;
            }
            object.properties.values_mut().for_each(unsigned);
            if let Some(AdditionalProperties::RefOr(values)) = object.additional_properties.as_deref_mut() {
                unsigned(values);
            }
        }
        Schema::Array(array) => {
            if let ArrayItems::RefOrSchema(items) = &mut array.items {
                unsigned(items);
            }
            array.prefix_items.iter_mut().for_each(unsigned_itself);
        }
        Schema::OneOf(one) => one.items.iter_mut().for_each(unsigned),
        Schema::AnyOf(any) => any.items.iter_mut().for_each(unsigned),
        Schema::AllOf(all) => all.items.iter_mut().for_each(unsigned),
        _ => {}
    }
}

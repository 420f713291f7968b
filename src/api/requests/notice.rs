//! The body of a notice.

use serde::Serialize;
use serde_json::value::RawValue;
use utoipa::ToSchema;

use crate::api::decode::{At, Faults, Object, list, object, text, unknown_name};
use crate::service::{NoticeKind, NoticeKindName, NoticeTerms, Target};

/// Fields of a notice.
pub const NOTICE_FIELDS: [&str; 2] = ["url", "on"];

const KINDS: [NoticeKind; 2] = [NoticeKind::LimitRisk, NoticeKind::Drift];

/// Who is to be told of what. Unknown fields are refused.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, ToSchema)]
#[serde(deny_unknown_fields)]
pub struct NoticeBody {
    /// Where events are sent: https, without user, password and fragment, among the addresses that whoever runs the service lists.
    #[schema(max_length = 2000, examples("https://hooks.example.org/tailcast"))]
    pub url: String,
    /// What is told; both when left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    #[schema(nullable = false, min_items = 1, max_items = 2)]
    pub on: Option<Vec<NoticeKindName>>,
}

/// Reads a notice to keep; its name stands in its address.
pub fn read_notice(raw: &RawValue, faults: &mut Faults) -> Option<NoticeTerms> {
    let given = object(raw, At::ROOT, &NOTICE_FIELDS, faults)?;
    let target = target(&given, faults);
    let kinds = given.get("on").map_or(Some(KINDS.to_vec()), |raw| kinds(raw, At::ROOT.field("on"), faults));
    Some(NoticeTerms { target: target?, kinds: kinds? })
}

fn target(given: &Object<'_>, faults: &mut Faults) -> Option<Target> {
    let (root, raw) = (At::ROOT, given.required("url", &At::ROOT, faults)?);
    let at = root.field("url");
    match Target::new(&text(raw, at, faults)?) {
        Ok(target) => Some(target),
        Err(fault) => {
            faults.add(&at, fault.to_string());
            None
        }
    }
}

fn kinds(raw: &RawValue, at: At<'_>, faults: &mut Faults) -> Option<Vec<NoticeKind>> {
    let mut kinds = Vec::new();
    let length = list(raw, at, faults, |index, item, faults| {
        let at = at.item(index);
        let Some(name) = text(item, at, faults) else { return };
        match KINDS.into_iter().find(|kind| kind.as_str() == name) {
            None => faults.add(&at, unknown_name("kind of notice", &name, &KINDS.map(NoticeKind::as_str))),
            Some(kind) if kinds.contains(&kind) => faults.add(&at, format!("{name:?} is given twice")),
            Some(kind) => kinds.push(kind),
        }
    })?;
    if length == 0 {
        faults.add(&at, "a notice tells at least one of limit_risk and drift; leave on out for both");
        return None;
    }
    (kinds.len() == length).then_some(kinds)
}

//! What of a forecast is answered, and in which form.

use axum::extract::FromRequestParts;
use axum::http::HeaderMap;
use axum::http::request::Parts;

use super::{ResultFormat, parameters};
use crate::api::decode::{Fault, Faults, Place};
use crate::api::{ApiError, AppState};
use crate::report::ForecastPart;

/// The form of a forecast, and the part of it that a table tells.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ForecastForm {
    /// The form.
    pub format: ResultFormat,
    /// The part; JSON tells all of them.
    pub part: ForecastPart,
}

impl ForecastForm {
    /// The form that parameters of the query, or else the client's headers, ask for; `faults` are those of the query so far.
    pub fn of(given: &[(String, String)], headers: &HeaderMap, mut faults: Faults) -> Result<Self, ApiError> {
        let asked = given.iter().find(|(name, _)| name == "part").map(|(_, value)| value.as_str());
        let part = asked.map(|name| ForecastPart::ALL.into_iter().find(|part| part.name() == name));
        let wrong = |detail: String| Fault { place: Place::Query("part".into()), detail };
        if part == Some(None) {
            let names = ForecastPart::ALL.map(ForecastPart::name).join(", ");
            faults.push(wrong(format!("the parts are {names}")));
        }
        let format = ResultFormat::of(given, headers, faults)?;
        if asked.is_some() && format == ResultFormat::Json {
            let detail = "part says which table of CSV is wanted, and JSON tells all of them; ask for format=csv, or leave \
                          part out";
            let mut faults = Faults::default();
            faults.push(wrong(detail.into()));
            return Err(ApiError::Invalid(faults));
        }
        Ok(Self { format, part: part.flatten().unwrap_or(ForecastPart::Tail) })
    }

    /// A validator's tag as it is for this part: each is a representation of its own.
    pub fn tag(self, tag: &str) -> String {
        match self.part {
            ForecastPart::Tail => tag.to_owned(),
            part => format!("{tag}-{}", part.name()),
        }
    }
}

impl FromRequestParts<AppState> for ForecastForm {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["format", "part"], &mut faults);
        Self::of(&given, &parts.headers, faults)
    }
}

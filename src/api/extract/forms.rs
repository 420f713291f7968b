//! How an answer is to look: one type a kind of result, so that what does not apply to it is refused.

use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use axum::http::uri::Authority;
use axum::http::{HeaderMap, header};
use clap::ValueEnum;
use utoipa::IntoParams;

use super::format::FACES;
use super::{ResultFormat, parameters};
use crate::api::decode::{Fault, Faults, Place};
use crate::api::{ApiError, AppState};
use crate::report::{FitChart, ForecastChart, ForecastPart, Theme};

/// How a forecast is to look.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum ForecastForm {
    /// All of it.
    Json,
    /// One of its tables.
    Csv(ForecastPart),
    /// One of its charts, of one threshold where one is given.
    Svg(ForecastChart, Option<u64>, Theme),
    /// A report.
    Html(ReportForm),
}

/// How a fit is to look.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum FitForm {
    /// All of it.
    Json,
    /// Its tail.
    Csv,
    /// One of its charts.
    Svg(FitChart, Theme),
    /// A report.
    Html(ReportForm),
}

/// How a backtest is to look.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum BacktestForm {
    /// All of it.
    Json,
    /// Its tables.
    Csv,
    /// Its chart.
    Svg(Theme),
    /// A report.
    Html(ReportForm),
}

/// How a comparison is to look.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum ComparisonForm {
    /// All of it.
    Json,
    /// Its table.
    Csv,
    /// Its chart, of one threshold where one is given.
    Svg(Option<u64>, Theme),
    /// A report.
    Html(ReportForm),
}

/// How a report is to look.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReportForm {
    /// Its colours.
    pub theme: Theme,
    /// Where the client reached this service, for the report to say how to read it again.
    pub service: String,
}

/// What a query may say of a forecast's form.
#[derive(Debug, IntoParams)]
#[into_params(parameter_in = Query)]
#[expect(dead_code, reason = "describes what ForecastForm reads")]
pub struct ForecastFormQuery {
    /// Goes before Accept
    #[param(inline)]
    format: Option<ResultFormat>,
    /// Which table of CSV; `tail` when left out
    #[param(inline)]
    part: Option<ForecastPart>,
    /// Which chart of SVG; `growth` when left out
    #[param(inline)]
    chart: Option<ForecastChart>,
    /// The one threshold that the chart is about: `growth` and `scenarios` show it alone, `tail` names it
    #[param(minimum = 1)]
    threshold: Option<u64>,
    /// Colours of SVG and HTML; `auto` when left out
    #[param(inline)]
    theme: Option<Theme>,
}

/// What a query may say of a fit's form.
#[derive(Debug, IntoParams)]
#[into_params(parameter_in = Query)]
#[expect(dead_code, reason = "describes what FitForm reads")]
pub struct FitFormQuery {
    /// Goes before Accept
    #[param(inline)]
    format: Option<ResultFormat>,
    /// Which chart of SVG; `tail` when left out
    #[param(inline)]
    chart: Option<FitChart>,
    /// Colours of SVG and HTML; `auto` when left out
    #[param(inline)]
    theme: Option<Theme>,
}

/// What a query may say of a backtest's form.
#[derive(Debug, IntoParams)]
#[into_params(parameter_in = Query)]
#[expect(dead_code, reason = "describes what BacktestForm reads")]
pub struct BacktestFormQuery {
    /// Goes before Accept
    #[param(inline)]
    format: Option<ResultFormat>,
    /// Colours of SVG and HTML; `auto` when left out
    #[param(inline)]
    theme: Option<Theme>,
}

/// What a query may say of a comparison's form.
#[derive(Debug, IntoParams)]
#[into_params(parameter_in = Query)]
#[expect(dead_code, reason = "describes what ComparisonForm reads")]
pub struct ComparisonFormQuery {
    /// Goes before Accept
    #[param(inline)]
    format: Option<ResultFormat>,
    /// The one threshold that the chart shows; the highest compared when left out
    #[param(minimum = 1)]
    threshold: Option<u64>,
    /// Colours of SVG and HTML; `auto` when left out
    #[param(inline)]
    theme: Option<Theme>,
}

impl ForecastForm {
    /// Its form.
    pub fn format(&self) -> ResultFormat {
        match self {
            Self::Json => ResultFormat::Json,
            Self::Csv(_) => ResultFormat::Csv,
            Self::Svg(..) => ResultFormat::Svg,
            Self::Html(_) => ResultFormat::Html,
        }
    }

    /// A validator's tag as it is for what of the form is wanted: each is a representation of its own.
    pub fn tag(&self, tag: &str) -> String {
        match self {
            Self::Json | Self::Csv(ForecastPart::Tail) => tag.to_owned(),
            Self::Csv(part) => format!("{tag}-{}", part.name()),
            Self::Svg(chart, threshold, theme) => {
                let threshold = threshold.map(|threshold| format!("-{threshold}")).unwrap_or_default();
                format!("{tag}-{}{threshold}-{}", name(chart), name(theme))
            }
            Self::Html(report) => format!("{tag}-{}", name(&report.theme)),
        }
    }
}

impl FitForm {
    /// Its form.
    pub fn format(&self) -> ResultFormat {
        match self {
            Self::Json => ResultFormat::Json,
            Self::Csv => ResultFormat::Csv,
            Self::Svg(..) => ResultFormat::Svg,
            Self::Html(_) => ResultFormat::Html,
        }
    }

    /// As [`ForecastForm::tag`].
    pub fn tag(&self, tag: &str) -> String {
        match self {
            Self::Json | Self::Csv => tag.to_owned(),
            Self::Svg(chart, theme) => format!("{tag}-{}-{}", name(chart), name(theme)),
            Self::Html(report) => format!("{tag}-{}", name(&report.theme)),
        }
    }
}

impl BacktestForm {
    /// Its form.
    pub fn format(&self) -> ResultFormat {
        match self {
            Self::Json => ResultFormat::Json,
            Self::Csv => ResultFormat::Csv,
            Self::Svg(_) => ResultFormat::Svg,
            Self::Html(_) => ResultFormat::Html,
        }
    }

    /// As [`ForecastForm::tag`].
    pub fn tag(&self, tag: &str) -> String {
        match self {
            Self::Json | Self::Csv => tag.to_owned(),
            Self::Svg(theme) | Self::Html(ReportForm { theme, .. }) => format!("{tag}-{}", name(theme)),
        }
    }
}

impl FromRequestParts<AppState> for ForecastForm {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["format", "part", "chart", "threshold", "theme"], &mut faults);
        let query = Query { given: &given, headers: &parts.headers };
        let (part, chart) = (query.choice("part", &mut faults), query.choice("chart", &mut faults));
        let (threshold, theme) = (query.threshold(&mut faults), query.choice("theme", &mut faults));
        Ok(match query.format(faults)? {
            ResultFormat::Json => Self::Json,
            ResultFormat::Csv => Self::Csv(part.unwrap_or(ForecastPart::Tail)),
            ResultFormat::Svg => Self::Svg(chart.unwrap_or_default(), threshold, theme.unwrap_or_default()),
            ResultFormat::Html => Self::Html(query.report(theme)),
        })
    }
}

impl FromRequestParts<AppState> for FitForm {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["format", "chart", "theme"], &mut faults);
        let query = Query { given: &given, headers: &parts.headers };
        let (chart, theme) = (query.choice::<FitChart>("chart", &mut faults), query.choice("theme", &mut faults));
        Ok(match query.format(faults)? {
            ResultFormat::Json => Self::Json,
            ResultFormat::Csv => Self::Csv,
            ResultFormat::Svg => Self::Svg(chart.unwrap_or_default(), theme.unwrap_or_default()),
            ResultFormat::Html => Self::Html(query.report(theme)),
        })
    }
}

impl FromRequestParts<AppState> for BacktestForm {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        let mut faults = Faults::default();
        let given = parameters(&parts.uri, &["format", "theme"], &mut faults);
        let query = Query { given: &given, headers: &parts.headers };
        let theme = query.choice::<Theme>("theme", &mut faults);
        Ok(match query.format(faults)? {
            ResultFormat::Json => Self::Json,
            ResultFormat::Csv => Self::Csv,
            ResultFormat::Svg => Self::Svg(theme.unwrap_or_default()),
            ResultFormat::Html => Self::Html(query.report(theme)),
        })
    }
}

impl ComparisonForm {
    /// What a query may say of it.
    pub const KNOWN: [&str; 3] = ["format", "threshold", "theme"];

    /// The form that parameters of the query, or else the client's headers, ask for; `faults` are those of the query so far.
    pub fn of(given: &[(String, String)], headers: &HeaderMap, mut faults: Faults) -> Result<Self, ApiError> {
        let query = Query { given, headers };
        let (threshold, theme) = (query.threshold(&mut faults), query.choice::<Theme>("theme", &mut faults));
        Ok(match query.format(faults)? {
            ResultFormat::Json => Self::Json,
            ResultFormat::Csv => Self::Csv,
            ResultFormat::Svg => Self::Svg(threshold, theme.unwrap_or_default()),
            ResultFormat::Html => Self::Html(query.report(theme)),
        })
    }

    /// Its form.
    pub fn format(&self) -> ResultFormat {
        match self {
            Self::Json => ResultFormat::Json,
            Self::Csv => ResultFormat::Csv,
            Self::Svg(..) => ResultFormat::Svg,
            Self::Html(_) => ResultFormat::Html,
        }
    }
}

/// What a request says of the form of its answer.
struct Query<'a> {
    given: &'a [(String, String)],
    headers: &'a HeaderMap,
}

/// Each option with the forms it goes with.
const USES: [(&str, &[ResultFormat]); 4] = [
    ("part", &[ResultFormat::Csv]),
    ("chart", &[ResultFormat::Svg]),
    ("threshold", &[ResultFormat::Svg]),
    ("theme", &[ResultFormat::Svg, ResultFormat::Html]),
];

impl Query<'_> {
    /// The form asked for. An option that does nothing in it is refused.
    fn format(&self, faults: Faults) -> Result<ResultFormat, ApiError> {
        let format = ResultFormat::of(self.given, self.headers, &FACES, faults)?;
        let mut faults = Faults::default();
        for (name, forms) in USES {
            if self.value(name).is_some() && !forms.contains(&format) {
                let forms: Vec<String> = forms.iter().map(|form| format!("format={}", form.name())).collect();
                let detail = format!(
                    "{name} does nothing in the form {}; ask for {}, or leave {name} out",
                    format.name(),
                    forms.join(" or ")
                );
                faults.push(Fault { place: Place::Query(name.into()), detail });
            }
        }
        if faults.is_empty() { Ok(format) } else { Err(ApiError::Invalid(faults)) }
    }

    fn value(&self, name: &str) -> Option<&str> {
        self.given.iter().find(|(given, _)| given == name).map(|(_, value)| value.as_str())
    }

    /// One of several names.
    fn choice<T: ValueEnum>(&self, option: &str, faults: &mut Faults) -> Option<T> {
        let value = self.value(option)?;
        let found = T::value_variants().iter().find(|variant| name(*variant) == value);
        if found.is_none() {
            let names: Vec<String> = T::value_variants().iter().map(name).collect();
            let detail = format!("{option} is one of {}", names.join(", "));
            faults.push(Fault { place: Place::Query(option.into()), detail });
        }
        found.cloned()
    }

    fn threshold(&self, faults: &mut Faults) -> Option<u64> {
        let threshold = self.value("threshold")?.parse().ok().filter(|&threshold| threshold > 0);
        if threshold.is_none() {
            let detail = "threshold is a whole number of links, 1 or more: one of those that were forecast".into();
            faults.push(Fault { place: Place::Query("threshold".into()), detail });
        }
        threshold
    }

    fn report(&self, theme: Option<Theme>) -> ReportForm {
        ReportForm { theme: theme.unwrap_or_default(), service: service(self.headers) }
    }
}

/// Name of a variant in queries and on the command line.
fn name<T: ValueEnum>(variant: &T) -> String {
    variant.to_possible_value().map(|value| value.get_name().to_owned()).unwrap_or_default()
}

/// Where the client reached this service: what it, or the proxy before us, says.
fn service(headers: &HeaderMap) -> String {
    let text = |name| headers.get(name).and_then(|value: &header::HeaderValue| value.to_str().ok());
    let host = text(header::HOST).and_then(|host| host.parse::<Authority>().ok());
    let secure = text(header::HeaderName::from_static("x-forwarded-proto")) == Some("https");
    let scheme = if secure { "https" } else { "http" };
    host.map_or_else(|| "http://localhost".to_owned(), |host| format!("{scheme}://{host}"))
}

//! Who may ask for what: every request but those of open routes is held against its route's rule, before it takes any place.

mod cors;
mod document;
mod fields;
mod refusal;
mod rules;
mod site;

use std::sync::Arc;
use std::time::Duration;

use axum::body::Body;
use axum::extract::{FromRequestParts, MatchedPath, Request, State};
use axum::http::request::Parts;
use axum::http::{HeaderMap, HeaderValue, Method, StatusCode, Uri, header};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};
use futures_util::StreamExt;
use uuid::Uuid;

use super::observe::RequestId;
use super::problem::Problem;
use super::{ApiError, AppState};
use crate::config::{Config, KeysNeeded};
use crate::credential::{Credential, masked_path};
use crate::service::{
    Authorship, Belonging, KeyRing, KeyScope, LiveKey, Service, ServiceError, Spent, Standing, Thing, authored,
};
use fields::{Brought, brought, tell};
use refusal::Refusal;
use rules::{Need, Reach, is_page, methods_of, rule_of};
use site::Site;

pub use cors::cors;
pub use document::with_access;
pub use rules::{RULES, Rule};

/// How often a stream asks whether its key still opens it.
const STREAM_CHECK: Duration = Duration::from_secs(1);

/// What decides who may ask.
#[derive(Debug, Clone)]
pub struct Access {
    service: Service,
    required: bool,
    /// What is asked instead where no keys are.
    site: Option<Site>,
    /// Whether pages of other origins are told what they may.
    cors: bool,
}

/// What a request may see of lists: all of it, or what belongs to the networks that a key is bound to.
#[derive(Debug, Clone, Default)]
pub struct Sight(pub Option<String>);

impl Access {
    /// By the settings.
    pub fn new(service: Service, config: &Config) -> Self {
        let required = config.access.keys == KeysNeeded::Required;
        Self { service, required, site: Site::new(config), cors: !config.http.allowed_origins.is_empty() }
    }

    /// Whether a poll of a network's latest forecast may be answered without waiting for anything, and how its key's limits stand
    /// then. None where it must be looked at in full; nothing is counted then.
    pub fn at_once(&self, network: &str, uri: &Uri, headers: &HeaderMap) -> Option<Standing> {
        if self.cors && headers.contains_key(header::ORIGIN) {
            return None;
        }
        if self.site.as_ref().is_some_and(|site| site.refusal(&Method::GET, uri, headers).is_some()) {
            return None;
        }
        if !self.required {
            return Some(Standing::default());
        }
        let Brought::Key(credential) = brought(headers) else { return None };
        let live = self.keys().held(&credential).filter(|live| live.knows(network))?;
        match live.meter.spend(jiff::Timestamp::now()) {
            Spent::Counted(standing) => Some(standing),
            _ => None,
        }
    }

    fn keys(&self) -> &KeyRing {
        self.service.keys()
    }

    /// The key that opens an operation, with its limits; none where it is open.
    async fn check(
        &self,
        need: Need,
        (route, path): (&str, &str),
        (method, uri, headers): (&Method, &Uri, &HeaderMap),
    ) -> Result<Option<(Credential, Arc<LiveKey>, Standing)>, Denied> {
        let Need::Key(scope, reach) = need else { return Ok(None) };
        if let Some(refusal) = self.site.as_ref().and_then(|site| site.refusal(method, uri, headers)) {
            return Err(refusal.into());
        }
        if !self.required {
            return Ok(None);
        }
        let credential = match brought(headers) {
            Brought::Nothing => return Err(Refusal::NoKey.into()),
            Brought::NoKey => return Err(Refusal::Malformed.into()),
            Brought::Key(credential) => credential,
        };
        let live = self.keys().open(&credential).await?.map_err(Refusal::Fault)?;
        let standing = match live.meter.spend(jiff::Timestamp::now()) {
            Spent::Counted(standing) => standing,
            Spent::TooFast(standing, wait) => return Err(Denied::limited(Refusal::TooFast(wait), standing)),
            Spent::UsedUp(standing, wait) => return Err(Denied::limited(Refusal::UsedUp(wait), standing)),
        };
        let allowed = self.reaches(&live, scope, reach, (route, path)).await;
        match allowed {
            Ok(()) => Ok(Some((credential, live, standing))),
            Err(error) => Err(Denied { error: Box::new(error), standing }),
        }
    }

    async fn reaches(
        &self,
        live: &LiveKey,
        scope: KeyScope,
        reach: Reach,
        (route, path): (&str, &str),
    ) -> Result<(), ApiError> {
        if live.key.scope < scope {
            return Err(Refusal::Scope(scope).into());
        }
        if !live.is_bound() {
            return Ok(());
        }
        match reach {
            Reach::Listed => Ok(()),
            Reach::Beyond => Err(Refusal::Bound.into()),
            Reach::Network => match parameter(route, path, "{name}") {
                Some(network) if live.knows(&network) => Ok(()),
                _ => Err(Refusal::Network.into()),
            },
            Reach::Thing(thing) => {
                let network = self.network_of(thing, route, path).await?;
                let known = network.is_some_and(|network| live.knows(&network));
                known.then_some(()).ok_or(ServiceError::NotFound(missing(thing)).into())
            }
        }
    }

    async fn network_of(&self, thing: Belonging, route: &str, path: &str) -> Result<Option<String>, ApiError> {
        let id = parameter(route, path, "{id}").and_then(|id| Uuid::try_parse(&id).ok());
        match id {
            Some(id) => Ok(self.service.network_of(thing, id).await?),
            None => Ok(None),
        }
    }

    /// Whose line a write gets in the trail.
    async fn author(
        &self,
        need: Need,
        (route, path): (&str, &str),
        method: &Method,
        live: Option<&LiveKey>,
        request_id: Option<String>,
    ) -> Option<Authorship> {
        if matches!(*method, Method::GET | Method::HEAD | Method::OPTIONS) {
            return None;
        }
        let network = match need {
            // The line is worth having without its network.
            Need::Key(_, Reach::Thing(thing)) => self.network_of(thing, route, path).await.ok().flatten(),
            _ => parameter(route, path, "{name}"),
        };
        Some(Authorship {
            key: live.map(|live| (live.key.id.clone(), live.key.name.clone())),
            method: method.to_string(),
            route: route.to_owned(),
            path: masked_path(path).into_owned(),
            network,
            request_id,
        })
    }
}

/// Holds a request against its route's rule, and says whose it is.
pub async fn guard(State(access): State<Access>, mut request: Request, next: Next) -> Response {
    // Where there is no route there is nothing to guard.
    let Some(matched) = request.extensions().get::<MatchedPath>().cloned() else { return next.run(request).await };
    let route = matched.as_str();
    if is_page(route) {
        return next.run(request).await;
    }
    let Some(rule) = rule_of(request.method().as_str(), route) else { return without_rule(route) };
    let (uri, method, headers) = (request.uri().clone(), request.method().clone(), request.headers().clone());
    let path = uri.path().to_owned();
    let checked = access.check(rule.need, (route, &path), (&method, &uri, &headers)).await;
    let key = match checked {
        Ok(key) => key,
        Err(denied) => return denied.into_response(),
    };
    let live = key.as_ref().map(|(_, live, _)| live.as_ref());
    let request_id = request.extensions().get::<RequestId>().map(|RequestId(id)| id.clone());
    let author = access.author(rule.need, (route, &path), &method, live, request_id).await;
    let bound = live.filter(|live| live.is_bound()).map(|live| live.key.id.clone());
    request.extensions_mut().insert(Sight(bound));
    let response = authored(author, next.run(request)).await;
    let Some((credential, _, standing)) = key else { return response };
    let mut response = while_open(response, access.keys().clone(), credential);
    tell(&standing, response.headers_mut());
    response
}

/// A method that the route does not have; or a route without a rule, which a test keeps from coming so far.
fn without_rule(route: &str) -> Response {
    let methods = methods_of(route);
    if methods.is_empty() {
        return ApiError::Broken(format!("{route} has no rule of access")).into_response();
    }
    let mut response = Problem::of_status(StatusCode::METHOD_NOT_ALLOWED).into_response();
    if let Ok(allow) = HeaderValue::from_str(&methods.join(", ")) {
        response.headers_mut().insert(header::ALLOW, allow);
    }
    response
}

/// A stream of events that ends when its key opens nothing any more.
fn while_open(response: Response, keys: KeyRing, credential: Credential) -> Response {
    let streams =
        response.headers().get(header::CONTENT_TYPE).is_some_and(|kind| kind.as_bytes() == b"text/event-stream");
    if !streams {
        return response;
    }
    let closed = async move {
        loop {
            tokio::time::sleep(STREAM_CHECK).await;
            // A database that fails for a moment closes nothing.
            if let Ok(Err(_)) = keys.open(&credential).await {
                return;
            }
        }
    };
    response.map(|body| Body::from_stream(body.into_data_stream().take_until(Box::pin(closed))))
}

/// A part of a path, by its name in the route's template, with its percent signs decoded.
fn parameter(route: &str, path: &str, name: &str) -> Option<String> {
    let (_, part) = route.split('/').zip(path.split('/')).find(|(template, _)| *template == name)?;
    let mut query = url::form_urlencoded::parse(part.as_bytes());
    // A plus is a plus in a path; names that are taken hold none, nor = or &.
    match (query.next(), query.next()) {
        (Some((text, value)), None) if value.is_empty() && !part.contains(['+', '=', '&']) => Some(text.into_owned()),
        _ => None,
    }
}

fn missing(thing: Belonging) -> Thing {
    match thing {
        Belonging::Run => Thing::Run,
        Belonging::Job => Thing::Job,
        Belonging::Backtest => Thing::Backtest,
    }
}

/// A request that is turned away, and how its key's limits stand.
struct Denied {
    error: Box<ApiError>,
    standing: Standing,
}

impl Denied {
    fn limited(refusal: Refusal, standing: Standing) -> Self {
        Self { error: Box::new(refusal.into()), standing }
    }
}

impl<E: Into<ApiError>> From<E> for Denied {
    fn from(error: E) -> Self {
        Self { error: Box::new(error.into()), standing: Standing::default() }
    }
}

impl IntoResponse for Denied {
    fn into_response(self) -> Response {
        let mut response = self.error.into_response();
        tell(&self.standing, response.headers_mut());
        response
    }
}

impl From<Refusal> for ApiError {
    fn from(refusal: Refusal) -> Self {
        Self::Denied(Box::new(refusal.into_problem()))
    }
}

impl Access {
    /// Says in an answer that came at once how its key's limits stand, and that another origin may be answered otherwise.
    pub fn tell_at_once(&self, standing: &Standing, response: &mut Response) {
        tell(standing, response.headers_mut());
        if self.cors {
            response.headers_mut().append(header::VARY, HeaderValue::from_static("origin"));
        }
    }
}

impl FromRequestParts<AppState> for Sight {
    type Rejection = ApiError;

    async fn from_request_parts(parts: &mut Parts, _state: &AppState) -> Result<Self, ApiError> {
        // The guard always says; a list that nobody guards tells nothing.
        parts.extensions.get().cloned().ok_or_else(|| ApiError::Broken("a list without a guard".into()))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_network_of_a_path_is_told_as_its_handler_reads_it() {
        let route = "/v1/networks/{name}/snapshots/{as_of}";
        for (path, network) in [
            ("/v1/networks/heronsgate/snapshots/2026-06-01", Some("heronsgate")),
            ("/v1/networks/her%6Fnsgate/snapshots/2026-06-01", Some("heronsgate")),
            ("/v1/networks/a%2Fb/snapshots/x", Some("a/b")),
            ("/v1/networks/a+b/snapshots/x", None),
            ("/v1/networks/a=b/snapshots/x", None),
            ("/v1/networks//snapshots/x", None),
        ] {
            assert_eq!(parameter(route, path, "{name}").as_deref(), network, "{path}");
        }
        assert_eq!(parameter("/v1/jobs", "/v1/jobs", "{id}"), None);
    }

    #[test]
    fn a_route_without_a_rule_is_closed() {
        assert_eq!(without_rule("/v1/new").status(), StatusCode::INTERNAL_SERVER_ERROR);
        let response = without_rule("/v1/networks/{name}/comparison");
        assert_eq!(response.status(), StatusCode::METHOD_NOT_ALLOWED);
        assert_eq!(response.headers()[header::ALLOW], "GET, HEAD");
    }
}

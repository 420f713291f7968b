//! Requests that a web page makes a browser send: where no key is asked for, only the address and the page's origin tell them
//! from those of people at the machine.

use std::net::IpAddr;

use axum::http::uri::Authority;
use axum::http::{HeaderMap, Method, Uri, header};
use url::Url;

use super::refusal::Refusal;
use crate::config::{Config, KeysNeeded};

/// What a request without a key must show of where it comes from.
#[derive(Debug, Clone)]
pub struct Site {
    /// Whether the service is to be reached by the machine's own names alone: another name that leads here is a page's trick
    /// (DNS rebinding).
    local: bool,
    /// Origins whose pages may ask.
    origins: Vec<String>,
}

impl Site {
    /// By the settings; none where keys are asked for, which no browser sends of its own accord.
    pub fn new(config: &Config) -> Option<Self> {
        let keys = config.access.keys;
        let local = keys == KeysNeeded::Off;
        (keys != KeysNeeded::Required).then(|| Self { local, origins: config.http.allowed_origins.clone() })
    }

    /// Why a request is turned away, if it is.
    pub fn refusal(&self, method: &Method, uri: &Uri, headers: &HeaderMap) -> Option<Refusal> {
        let host = uri.authority().cloned().or_else(|| host_of(headers));
        // HTTP/1.0 has no Host; no browser speaks it.
        if self.local && host.as_ref().is_some_and(|host| !is_own_name(host.host())) {
            return Some(Refusal::Host);
        }
        if method.is_safe() {
            return None;
        }
        let origin = headers.get(header::ORIGIN)?.to_str().unwrap_or_default();
        let listed = self.origins.iter().any(|listed| listed == origin);
        let own = host.is_some_and(|host| is_origin_of(origin, &host));
        (!listed && !own).then_some(Refusal::Origin)
    }
}

fn host_of(headers: &HeaderMap) -> Option<Authority> {
    headers.get(header::HOST).and_then(|host| Authority::try_from(host.as_bytes()).ok())
}

/// Whether a name cannot be anybody else's: an address, or one that stands for the machine itself (RFC 6761, section 6.3).
fn is_own_name(name: &str) -> bool {
    let name = name.trim_start_matches('[').trim_end_matches(']').trim_end_matches('.').to_ascii_lowercase();
    name.parse::<IpAddr>().is_ok() || name == "localhost" || name.ends_with(".localhost")
}

/// Whether an origin is that of the address a request was sent to, by whichever scheme.
fn is_origin_of(origin: &str, host: &Authority) -> bool {
    let Ok(origin) = Url::parse(origin) else { return false };
    let asked = Url::parse(&format!("{}://{host}", origin.scheme()));
    asked.is_ok_and(|asked| asked.host() == origin.host() && asked.port() == origin.port() && origin.host().is_some())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn refused(site: &Site, method: Method, host: &str, origin: Option<&str>) -> Option<Refusal> {
        let mut headers = HeaderMap::from_iter([(header::HOST, host.parse().unwrap())]);
        headers.extend(origin.map(|origin| (header::ORIGIN, origin.parse().unwrap())));
        site.refusal(&method, &Uri::from_static("/v1/forecasts"), &headers)
    }

    #[test]
    fn only_the_machines_own_names_are_served_without_keys() {
        let site = Site { local: true, origins: Vec::new() };
        for host in ["127.0.0.1:8080", "[::1]:8080", "localhost:8080", "planning.localhost", "LOCALHOST."] {
            assert_eq!(refused(&site, Method::GET, host, None), None, "{host}");
        }
        for host in ["evil.example:8080", "localhost.evil.example", "127.0.0.1.evil.example"] {
            assert_eq!(refused(&site, Method::GET, host, None), Some(Refusal::Host), "{host}");
        }
        let anyone = Site { local: false, origins: Vec::new() };
        assert_eq!(refused(&anyone, Method::GET, "planning.example.org", None), None);
    }

    #[test]
    fn pages_of_other_origins_write_nothing() {
        let site = Site { local: true, origins: vec!["https://planning.example.org".to_owned()] };
        let host = "127.0.0.1:8080";
        for origin in [None, Some("http://127.0.0.1:8080"), Some("https://planning.example.org")] {
            assert_eq!(refused(&site, Method::POST, host, origin), None, "{origin:?}");
        }
        for origin in ["https://evil.example", "null", "http://127.0.0.1:9090", "http://localhost:8080", ""] {
            assert_eq!(refused(&site, Method::POST, host, Some(origin)), Some(Refusal::Origin), "{origin}");
            assert_eq!(refused(&site, Method::GET, host, Some(origin)), None, "{origin}");
        }
        let proxied = Site { local: false, origins: Vec::new() };
        assert_eq!(refused(&proxied, Method::PUT, "planning.example.org", Some("https://planning.example.org")), None);
    }
}

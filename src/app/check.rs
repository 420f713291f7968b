//! `check`: is the service ready? For container health checks, which have no other client at hand.

use std::net::{IpAddr, Ipv4Addr, Ipv6Addr, SocketAddr};
use std::time::Duration;

use super::Stop;
use crate::credential::Credential;

const TIMEOUT: Duration = Duration::from_secs(3);

/// A client for this machine's own services: no proxy, and problem documents are answers like any other.
pub fn local_client(timeout: Option<Duration>) -> ureq::Agent {
    let settings = ureq::Agent::config_builder().proxy(None).http_status_as_error(false).timeout_global(timeout);
    ureq::Agent::new_with_config(settings.build())
}

/// A request with the key of the settings, where they have one (access.key, TAILCAST_ACCESS_KEY).
pub fn with_key<B>(request: ureq::RequestBuilder<B>, key: Option<&Credential>) -> ureq::RequestBuilder<B> {
    match key {
        Some(key) => request.header("Authorization", format!("Bearer {}", key.reveal())),
        None => request,
    }
}

/// Asks the service that listens on `bind`.
pub fn ready(bind: SocketAddr) -> Result<(), Stop> {
    let url = format!("http://{}/readyz", reachable(bind));
    let mut response =
        local_client(Some(TIMEOUT)).get(&url).call().map_err(|error| Stop::failed(&format!("asking {url}"), error))?;
    if response.status() == 200 {
        return Ok(());
    }
    let text = response.body_mut().read_to_string().unwrap_or_default();
    Err(Stop::Failed(format!("{url} answers {}: {text}", response.status())))
}

/// Where to reach a service that listens on `bind`: one that listens everywhere is reached over loopback.
pub fn reachable(bind: SocketAddr) -> SocketAddr {
    let ip = match bind.ip() {
        IpAddr::V4(ip) if ip.is_unspecified() => Ipv4Addr::LOCALHOST.into(),
        IpAddr::V6(ip) if ip.is_unspecified() => Ipv6Addr::LOCALHOST.into(),
        ip => ip,
    };
    SocketAddr::new(ip, bind.port())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn everywhere_is_reached_over_loopback() {
        for (bind, reached) in
            [("0.0.0.0:80", "127.0.0.1:80"), ("[::]:80", "[::1]:80"), ("127.0.0.2:80", "127.0.0.2:80")]
        {
            assert_eq!(reachable(bind.parse().unwrap()), reached.parse().unwrap());
        }
    }
}

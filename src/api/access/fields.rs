//! Header fields of keys and their limits.

use axum::http::{HeaderMap, HeaderName, HeaderValue, header};

use crate::credential::Credential;
use crate::service::{Allowance, Standing};

// draft-ietf-httpapi-ratelimit-headers, from version 08 on
const POLICY: HeaderName = HeaderName::from_static("ratelimit-policy");
const LIMIT: HeaderName = HeaderName::from_static("ratelimit");

/// The key that a request brings.
#[derive(Debug)]
pub enum Brought {
    /// None.
    Nothing,
    /// Something that is no key.
    NoKey,
    /// A key.
    Key(Credential),
}

/// Reads the key of a request (RFC 6750, section 2.1).
pub fn brought(headers: &HeaderMap) -> Brought {
    let mut given = headers.get_all(header::AUTHORIZATION).iter();
    let value = match (given.next(), given.next()) {
        (None, _) => return Brought::Nothing,
        (Some(value), None) => value,
        _ => return Brought::NoKey,
    };
    let read = || {
        let (scheme, token) = value.to_str().ok()?.split_once(' ')?;
        Credential::parse(token.trim_matches(' ')).filter(|_| scheme.eq_ignore_ascii_case("bearer"))
    };
    read().map_or(Brought::NoKey, Brought::Key)
}

/// Says how a key's limits stand, where it has any.
pub fn tell(standing: &Standing, headers: &mut HeaderMap) {
    let limits = [("minute", standing.minute), ("day", standing.day)];
    let told = |word: &dyn Fn(&str, Allowance) -> String| {
        let words: Vec<String> = limits.iter().filter_map(|&(name, limit)| Some(word(name, limit?))).collect();
        HeaderValue::from_str(&words.join(", ")).ok().filter(|value| !value.is_empty())
    };
    let policy = told(&|name, limit| format!("\"{name}\";q={};w={}", limit.most, limit.window));
    let left = told(&|name, limit| format!("\"{name}\";r={};t={}", limit.left, limit.reset));
    if let (Some(policy), Some(left)) = (policy, left) {
        headers.insert(POLICY, policy);
        headers.insert(LIMIT, left);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_key_is_read_from_its_header_alone() {
        let key = Credential::generate();
        let with = |values: &[String]| {
            let given = values.iter().map(|value| (header::AUTHORIZATION, HeaderValue::from_str(value).unwrap()));
            brought(&given.collect())
        };
        assert!(matches!(with(&[]), Brought::Nothing));
        for scheme in ["Bearer ", "bearer ", "BEARER  "] {
            let Brought::Key(found) = with(&[format!("{scheme}{}", key.reveal())]) else { panic!("{scheme}") };
            assert_eq!(found, key);
        }
        let twice = || format!("Bearer {}", key.reveal());
        for wrong in [key.reveal(), format!("Basic {}", key.reveal()), "Bearer".into(), "Bearer x".into()] {
            assert!(matches!(with(&[wrong]), Brought::NoKey));
        }
        let mut headers = HeaderMap::new();
        headers.append(header::AUTHORIZATION, twice().parse().unwrap());
        headers.append(header::AUTHORIZATION, twice().parse().unwrap());
        assert!(matches!(brought(&headers), Brought::NoKey));
    }

    /// The form of the draft's version 08 and later: a list of named policies with their parameters.
    #[test]
    fn limits_are_told_as_the_draft_says() {
        let mut headers = HeaderMap::new();
        tell(&Standing::default(), &mut headers);
        assert!(headers.is_empty());
        let minute = Allowance { most: 60, window: 60, left: 50, reset: 10 };
        let day = Allowance { most: 1000, window: 86_400, left: 7, reset: 3600 };
        tell(&Standing { minute: Some(minute), day: Some(day) }, &mut headers);
        assert_eq!(headers[POLICY], "\"minute\";q=60;w=60, \"day\";q=1000;w=86400");
        assert_eq!(headers[LIMIT], "\"minute\";r=50;t=10, \"day\";r=7;t=3600");
    }
}

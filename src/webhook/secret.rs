//! The secret that calls are signed with.

use std::fmt;

use base64::Engine as _;
use base64::engine::general_purpose::STANDARD;
use hmac::{Hmac, Mac};
use sha2::Sha256;

/// What a secret's text may start with.
const PREFIX: &str = "whsec_";
/// Fewest and most bytes of a secret (Standard Webhooks 1.0).
const LEAST_BYTES: usize = 24;
const MOST_BYTES: usize = 64;

/// A secret shared with receivers. It is never shown.
#[derive(Clone, PartialEq, Eq)]
pub struct Secret(Vec<u8>);

/// The text is no secret. It is not repeated.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error(
    "the secret must be the base64 of {LEAST_BYTES} to {MOST_BYTES} random bytes, with or without whsec_ before it; make one \
     with: openssl rand -base64 32"
)]
pub struct SecretFault;

impl Secret {
    /// Reads a secret's text.
    ///
    /// # Errors
    /// When it is not base64 of as many bytes as a secret has.
    pub fn new(text: &str) -> Result<Self, SecretFault> {
        let text = text.trim();
        let bytes = STANDARD.decode(text.strip_prefix(PREFIX).unwrap_or(text)).map_err(|_| SecretFault)?;
        if (LEAST_BYTES..=MOST_BYTES).contains(&bytes.len()) { Ok(Self(bytes)) } else { Err(SecretFault) }
    }

    /// The signature of a call: `v1,` and the base64 of HMAC-SHA256 over id, seconds since 1970 and body, joined by full stops.
    ///
    /// References: Standard Webhooks 1.0, signature scheme; RFC 2104.
    pub fn sign(&self, id: &str, timestamp: i64, body: &str) -> String {
        // A key of any length is taken (RFC 2104, section 3), so the error cannot come.
        let Ok(mut mac) = Hmac::<Sha256>::new_from_slice(&self.0) else { return String::new() };
        mac.update(format!("{id}.{timestamp}.{body}").as_bytes());
        format!("v1,{}", STANDARD.encode(mac.finalize().into_bytes()))
    }
}

impl fmt::Debug for Secret {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Secret(…)")
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The vector of the Standard Webhooks project's own libraries, from memory; Python's hmac gives the same signature.
    #[test]
    fn the_signature_is_that_of_the_published_vector() {
        let secret = Secret::new("whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw").unwrap();
        let signature = secret.sign("msg_p5jXN8AQM9LWM0D4loKWxJek", 1_614_265_330, r#"{"test": 2432232314}"#);
        assert_eq!(signature, "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE=");
        assert_eq!(Secret::new("MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"), Ok(secret));
    }

    #[test]
    fn a_secret_is_long_enough_and_never_shown() {
        for text in ["", "whsec_", "short", "not base64 at all, although it is long enough", &STANDARD.encode([7; 23])]
        {
            assert_eq!(Secret::new(text), Err(SecretFault), "{text}");
        }
        assert_eq!(Secret::new(&STANDARD.encode([7; 65])), Err(SecretFault));
        let secret = Secret::new(&STANDARD.encode([7; 24])).unwrap();
        assert_eq!(format!("{secret:?}"), "Secret(…)");
    }
}

//! Access keys as text: how they are made and told from others, what is kept of them, and how they are kept out of sight.

use std::borrow::Cow;
use std::fmt;

use percent_encoding::percent_decode_str;
use sha2::{Digest, Sha256};
use subtle::ConstantTimeEq;

/// What every key starts with, for people and for programs that look for secrets in files.
const PREFIX: &str = "tailcast_";
/// Hexadecimal digits of the part that is not secret, and of the one that is: 64 and 256 bits.
const ID_DIGITS: usize = 16;
const SECRET_DIGITS: usize = 64;

/// An access key. Its secret part is never shown, but by [`Self::reveal`].
#[derive(Clone, PartialEq, Eq)]
pub struct Credential {
    id: String,
    secret: String,
}

impl Credential {
    /// A new key, from the thread's cryptographic generator.
    pub fn generate() -> Self {
        Self {
            id: hex(&rand::random::<[u8; ID_DIGITS / 2]>()),
            secret: hex(&rand::random::<[u8; SECRET_DIGITS / 2]>()),
        }
    }

    /// Reads a key; none when it is none.
    pub fn parse(text: &str) -> Option<Self> {
        let (id, secret) = text.strip_prefix(PREFIX)?.split_once('_')?;
        let well_formed = |part: &str, digits: usize| part.len() == digits && part.bytes().all(is_digit);
        (well_formed(id, ID_DIGITS) && well_formed(secret, SECRET_DIGITS))
            .then(|| Self { id: id.to_owned(), secret: secret.to_owned() })
    }

    /// The part that is not secret.
    pub fn id(&self) -> &str {
        &self.id
    }

    /// What is kept of the secret part: its SHA-256, hexadecimal.
    pub fn digest(&self) -> String {
        hex(&Sha256::digest(self.secret.as_bytes()))
    }

    /// Whether a kept digest is this key's, in a time that does not tell how much of it is.
    pub fn matches(&self, digest: &str) -> bool {
        self.digest().as_bytes().ct_eq(digest.as_bytes()).into()
    }

    /// The whole key, for whoever it was made for or is sent to.
    pub fn reveal(&self) -> String {
        format!("{PREFIX}{}_{}", self.id, self.secret)
    }
}

impl fmt::Debug for Credential {
    fn fmt(&self, formatter: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(formatter, "{PREFIX}{}_…", self.id)
    }
}

/// A text with the secret part of every key in it left out, also of a key that was cut short.
pub fn masked(text: &str) -> Cow<'_, str> {
    let mut safe = String::new();
    let mut rest = text;
    while let Some(at) = rest.find(PREFIX) {
        let (before, found) = rest.split_at(at + PREFIX.len());
        safe.push_str(before);
        rest = found;
        let digits = |text: &str| text.bytes().take_while(|&byte| is_digit(byte)).count();
        let Some((id, after)) = found.split_at_checked(ID_DIGITS) else { continue };
        if digits(id) == ID_DIGITS && after.starts_with('_') && digits(after.get(1..).unwrap_or_default()) > 0 {
            safe.push_str(id);
            safe.push_str("_…");
            let secret = after.get(1..).unwrap_or_default();
            rest = secret.get(digits(secret)..).unwrap_or_default();
        }
    }
    if safe.is_empty() {
        return Cow::Borrowed(text);
    }
    safe.push_str(rest);
    Cow::Owned(safe)
}

/// A path with the secret part of every key in it left out, also of one whose characters are percent-encoded.
pub fn masked_path(path: &str) -> Cow<'_, str> {
    let plain = masked(path);
    if !path.contains('%') {
        return plain;
    }
    match masked(&percent_decode_str(path).decode_utf8_lossy()) {
        Cow::Borrowed(_) => plain,
        Cow::Owned(safe) => Cow::Owned(safe),
    }
}

fn is_digit(byte: u8) -> bool {
    byte.is_ascii_digit() || (b'a'..=b'f').contains(&byte)
}

fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_key_is_read_back_and_its_secret_is_not_shown() {
        let key = Credential::generate();
        let text = key.reveal();
        assert_eq!(text.len(), PREFIX.len() + ID_DIGITS + 1 + SECRET_DIGITS);
        assert_eq!(Credential::parse(&text).as_ref(), Some(&key));
        assert!(key.matches(&key.digest()) && !key.matches(&Credential::generate().digest()) && !key.matches(""));
        assert!(!format!("{key:?}").contains(&key.secret) && !key.digest().contains(&key.secret));
        assert_ne!(Credential::generate().id, key.id);
        for wrong in ["", "tailcast_", &text[1..], &text[..text.len() - 1], &text.to_uppercase(), &format!("{text}0")] {
            assert_eq!(Credential::parse(wrong), None, "{wrong}");
        }
    }

    /// SHA-256 of the text "abc…" is checked against FIPS 180-4's own example through the digest of a known secret.
    #[test]
    fn the_digest_is_sha_256() {
        assert_eq!(hex(&Sha256::digest(b"abc")), "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
        let key = Credential { id: "0".repeat(ID_DIGITS), secret: "0".repeat(SECRET_DIGITS) };
        assert_eq!(key.digest(), hex(&Sha256::digest("0".repeat(SECRET_DIGITS))));
    }

    #[test]
    fn keys_are_masked_wherever_they_stand() {
        let (one, two) = (Credential::generate(), Credential::generate());
        let (a, b) = (one.reveal(), two.reveal());
        let text = format!("x {a}/{b} tailcast_ tailcast_é {}", &a[..40]);
        let safe = masked(&text);
        assert!(!safe.contains(&one.secret[..14]) && !safe.contains(&two.secret[..8]), "{safe}");
        assert_eq!(safe, format!("x {one:?}/{two:?} tailcast_ tailcast_é {one:?}"));
        for plain in ["", "nothing here", "tailcast_requests_total", "tailcast_0123456789abcdef", "a tailcast"] {
            assert_eq!(masked(plain), plain);
        }
    }
}

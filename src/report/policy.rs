//! What a browser may load for a page or a picture of ours: nothing but what is within.

use base64::Engine as _;
use base64::engine::general_purpose::STANDARD;
use sha2::{Digest, Sha256};

/// A Content Security Policy (W3C, level 3) for markup that is complete in itself: its styles are named by their digests, and
/// nothing else is let in. Callers' texts cannot add a style: they are escaped.
///
/// ```
/// use tailcast::report::content_policy;
/// assert!(content_policy("<style>p{margin:0}</style>").contains("style-src 'sha256-"));
/// assert!(content_policy("<p>&lt;style></p>").contains("style-src 'none'"));
/// ```
pub fn content_policy(markup: &str) -> String {
    let mut digests: Vec<String> =
        styles(markup).map(|style| format!("'sha256-{}'", STANDARD.encode(Sha256::digest(style.as_bytes())))).collect();
    digests.sort();
    digests.dedup();
    let styles = if digests.is_empty() { "'none'".to_owned() } else { digests.join(" ") };
    format!(
        "default-src 'none'; style-src {styles}; img-src data:; base-uri 'none'; form-action 'none'; frame-ancestors 'self'"
    )
}

/// The texts of the style elements.
fn styles(markup: &str) -> impl Iterator<Item = &str> {
    markup.split("<style").skip(1).filter_map(|rest| {
        let (_, inside) = rest.split_once('>')?;
        inside.split_once("</style>").map(|(style, _)| style)
    })
}

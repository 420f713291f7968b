//! The planner's page: its files, compiled in, so that the program is the whole of it.

use std::sync::LazyLock;

/// A file of the page.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct WebFile {
    /// Its name under `/assets/`; the page itself is `index.html`.
    pub name: &'static str,
    /// Its media type.
    pub media_type: &'static str,
    /// Its content.
    pub text: &'static str,
}

const HTML: &str = "text/html; charset=utf-8";
const CSS: &str = "text/css; charset=utf-8";
const SCRIPT: &str = "text/javascript; charset=utf-8";
const SVG: &str = "image/svg+xml";
const CSV: &str = "text/csv; charset=utf-8";

macro_rules! web {
    ($name:literal, $media_type:expr) => {
        WebFile { name: $name, media_type: $media_type, text: include_str!(concat!("web/", $name)) }
    };
}

static FILES: LazyLock<Vec<WebFile>> = LazyLock::new(|| {
    let mut files = vec![
        web!("index.html", HTML),
        web!("style.css", CSS),
        web!("icon.svg", SVG),
        web!("answer.mjs", SCRIPT),
        web!("ask.mjs", SCRIPT),
        web!("chart.mjs", SCRIPT),
        web!("defaults.mjs", SCRIPT),
        web!("demo.mjs", SCRIPT),
        web!("dom.mjs", SCRIPT),
        web!("fields.mjs", SCRIPT),
        web!("http.mjs", SCRIPT),
        web!("jobs.mjs", SCRIPT),
        web!("kept.mjs", SCRIPT),
        web!("key.mjs", SCRIPT),
        web!("main.mjs", SCRIPT),
        web!("network.mjs", SCRIPT),
        web!("networks.mjs", SCRIPT),
        web!("numbers.mjs", SCRIPT),
        web!("paste.mjs", SCRIPT),
        web!("problem.mjs", SCRIPT),
        web!("questions.mjs", SCRIPT),
        web!("reproduce.mjs", SCRIPT),
        web!("request.mjs", SCRIPT),
        web!("tables.mjs", SCRIPT),
        web!("words.mjs", SCRIPT),
    ];
    let text = include_str!("../../examples/heronsgate/2026-08-01.csv");
    files.push(WebFile { name: "heronsgate.csv", media_type: CSV, text });
    files
});

/// The files of the page.
pub fn web_files() -> &'static [WebFile] {
    &FILES
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_file_of_the_folder_is_compiled_in() {
        let folder = concat!(env!("CARGO_MANIFEST_DIR"), "/src/report/web");
        let mut there: Vec<_> = std::fs::read_dir(folder)
            .unwrap()
            .map(|entry| entry.unwrap().file_name().into_string().unwrap())
            .chain(["heronsgate.csv".to_owned()])
            .collect();
        let mut compiled: Vec<_> = web_files().iter().map(|file| file.name.to_owned()).collect();
        there.sort();
        compiled.sort();
        assert_eq!(there, compiled);
    }

    #[test]
    fn nothing_is_asked_of_another_origin() {
        for file in web_files() {
            // The namespace of SVG is a name, not an address that is loaded.
            let text = file.text.replace("http://www.w3.org/2000/svg", "");
            for address in ["http://", "https://", "\"//", "'//"] {
                assert!(!text.contains(address), "{} names {address}", file.name);
            }
        }
    }
}

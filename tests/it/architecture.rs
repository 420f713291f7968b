//! Which module may know which: the arrows of the design, held against the sources.

use std::collections::{BTreeMap, BTreeSet};
use std::path::{Path, PathBuf};

/// Every module with the modules it may name.
const ARROWS: [(&str, &[&str]); 18] = [
    ("numerics", &[]),
    ("model", &["numerics"]),
    ("census", &["model"]),
    ("growth", &["model", "numerics"]),
    ("fit", &["growth", "model", "numerics"]),
    ("forecast", &["growth", "model", "numerics"]),
    ("evaluate", &["fit", "forecast", "growth", "model", "numerics"]),
    ("ingest", &["census", "model"]),
    // What the operator lists is read into what calls are held against.
    ("config", &["credential", "sources", "webhook"]),
    ("credential", &[]),
    ("webhook", &[]),
    // Databases of the operator's; the service's own tables are the store's.
    ("sources", &["model"]),
    ("telemetry", &["config", "credential"]),
    ("store", &["config", "model"]),
    // fit, forecast and growth: the words of evaluate's requests, answers and errors.
    (
        "service",
        &[
            "census",
            "config",
            "credential",
            "evaluate",
            "fit",
            "forecast",
            "growth",
            "ingest",
            "model",
            "sources",
            "store",
            "webhook",
        ],
    ),
    ("report", &["service"]),
    ("api", &["config", "credential", "model", "report", "service"]),
    // growth: the demo grows its network with the simulator, so that what comes true is known.
    ("app", &["api", "census", "config", "credential", "growth", "ingest", "model", "report", "service", "telemetry"]),
];

const CORE: [&str; 7] = ["numerics", "model", "census", "growth", "fit", "forecast", "evaluate"];

/// Crates that the core must not know.
const BOUNDARY_CRATES: [&str; 20] = [
    "axum",
    "clap",
    "config",
    "csv",
    "httpdate",
    "metrics",
    "metrics_exporter_prometheus",
    "opentelemetry",
    "serde",
    "serde_json",
    "sha2",
    "sqlx",
    "tokio",
    "tower_http",
    "tracing",
    "tracing_opentelemetry",
    "utoipa",
    "ureq",
    "url",
    "uuid",
];

#[test]
fn modules_name_only_what_the_arrows_allow() {
    let allowed = BTreeMap::from(ARROWS);
    let mut wrong = Vec::new();
    for (module, file, text) in sources() {
        let Some(allowed) = allowed.get(module.as_str()) else {
            wrong.push(format!("{}: the module {module} has no arrows", file.display()));
            continue;
        };
        for named in paths_after(&text, "crate::") {
            if named != module && ARROWS.iter().any(|&(known, _)| known == named) && !allowed.contains(&named.as_str())
            {
                wrong.push(format!("{}: {module} must not know {named}", file.display()));
            }
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn the_core_knows_no_boundary_crate_and_sql_stays_in_the_store() {
    let mut wrong = Vec::new();
    for (module, file, text) in sources() {
        let crates = crates_named(&text);
        if CORE.contains(&module.as_str()) {
            wrong.extend(
                BOUNDARY_CRATES
                    .iter()
                    .filter(|&&name| crates.contains(name))
                    .map(|name| format!("{}: {name}", file.display())),
            );
        }
        if !["store", "sources"].contains(&module.as_str()) && crates.contains("sqlx") {
            wrong.push(format!("{}: sqlx outside the store", file.display()));
        }
        if !["api", "app"].contains(&module.as_str()) && crates.contains("axum") {
            wrong.push(format!("{}: axum outside api and app", file.display()));
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn main_only_parses_and_starts() {
    let text = std::fs::read_to_string(root().join("main.rs")).unwrap();
    assert!(text.lines().count() < 60);
    let named: BTreeSet<String> = paths_after(&text, "tailcast::").into_iter().collect();
    assert_eq!(named, BTreeSet::from(["app".to_owned()]));
}

#[test]
fn files_are_of_a_size_to_read() {
    for (_, file, text) in sources() {
        let lines = text.lines().count();
        assert!(lines <= 500, "{} has {lines} lines; split it", file.display());
    }
}

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("src")
}

/// Every source file but main.rs and lib.rs, with the top module it belongs to.
fn sources() -> Vec<(String, PathBuf, String)> {
    let mut found = Vec::new();
    let mut folders = vec![root()];
    while let Some(folder) = folders.pop() {
        for entry in std::fs::read_dir(folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                folders.push(path);
            } else if path.extension().is_some_and(|extension| extension == "rs") {
                let inside = path.strip_prefix(root()).unwrap().to_owned();
                let top = inside.components().next().unwrap().as_os_str().to_string_lossy().replace(".rs", "");
                if top != "main" && top != "lib" {
                    found.push((top, inside, code(&std::fs::read_to_string(&path).unwrap())));
                }
            }
        }
    }
    assert!(found.len() > 20, "the sources were found");
    found
}

/// The text without its comments, whose examples may name anything.
fn code(text: &str) -> String {
    text.lines().filter(|line| !line.trim_start().starts_with("//")).collect::<Vec<_>>().join("\n")
}

/// The first names after every `prefix`, those of a braced list included.
fn paths_after(text: &str, prefix: &str) -> Vec<String> {
    let mut names = Vec::new();
    for (start, _) in text.match_indices(prefix) {
        if text[..start].ends_with(|before: char| before.is_alphanumeric() || before == '_' || before == ':') {
            continue;
        }
        let rest = &text[start + prefix.len()..];
        match rest.strip_prefix('{') {
            Some(list) => names.extend(list.split('}').next().unwrap_or_default().split(',').map(first_name)),
            None => names.push(first_name(rest)),
        }
    }
    names
}

fn first_name(text: &str) -> String {
    text.trim().chars().take_while(|character| character.is_alphanumeric() || *character == '_').collect()
}

/// Names in front of `::` that no path leads to: crates, mostly.
fn crates_named(text: &str) -> BTreeSet<String> {
    let mut names = BTreeSet::new();
    for (end, _) in text.match_indices("::") {
        let name: String = text[..end].chars().rev().take_while(|c| c.is_alphanumeric() || *c == '_').collect();
        let name: String = name.chars().rev().collect();
        if !text[..end - name.len()].ends_with("::") {
            names.insert(name);
        }
    }
    names
}

//! Why settings cannot be used.

use config::ConfigError;

/// Why the settings cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum SettingsError {
    /// A file or value is unreadable.
    #[error("{}", without_excerpt(.0))]
    Unreadable(#[from] ConfigError),
    /// A variable belongs to no key.
    #[error("{name} is not a setting; the known ones are {known}")]
    UnknownVariable {
        /// The variable.
        name: String,
        /// The variables that are known.
        known: String,
    },
    /// Keys in a file that are none of ours.
    #[error("{file} has keys that are no settings: {}; the known ones are {known}", keys.join(", "))]
    UnknownKeys {
        /// The file.
        file: String,
        /// The keys.
        keys: Vec<String>,
        /// The keys that are known.
        known: String,
    },
    /// A value is outside its range.
    #[error("{key} must lie between {least} and {most}, not at {value}")]
    OutOfRange {
        /// The key.
        key: &'static str,
        /// The value given.
        value: u64,
        /// The smallest taken.
        least: u64,
        /// The largest taken.
        most: u64,
    },
    /// A value is of the wrong kind.
    #[error("{key} must be {wanted}, not {given}")]
    WrongKind {
        /// The key.
        key: String,
        /// What it takes.
        wanted: &'static str,
        /// The value given.
        given: String,
    },
    /// A key that another one needs.
    #[error("{key} is needed with {with}: {why}")]
    Missing {
        /// The key.
        key: &'static str,
        /// The one that needs it.
        with: &'static str,
        /// What it must be.
        why: String,
    },
}

/// A fault in a file without the line that it is in, which may hold a secret: its place and what was expected.
fn without_excerpt(error: &ConfigError) -> String {
    let ConfigError::FileParse { uri, cause } = error else { return error.to_string() };
    let told = cause.to_string();
    let excerpt = |line: &&str| {
        line.split_once('|').is_some_and(|(number, _)| number.trim().parse::<u64>().is_ok() || number.trim().is_empty())
    };
    let words: Vec<&str> = told.lines().filter(|line| !excerpt(line) && !line.trim().is_empty()).collect();
    format!("{}: {}", uri.as_deref().unwrap_or("the settings"), words.join(": "))
}

//! `keys`: access keys, made, listed and revoked in the database that the service uses, also while it runs.

use std::io::Write;

use clap::{Args, Subcommand, ValueEnum};
use jiff::civil::Date;
use jiff::tz::TimeZone;
use jiff::{Span, Timestamp};
use serde::Serialize;

use super::{Stop, print_with};
use crate::config::DatabaseConfig;
use crate::credential::masked;
use crate::report::align;
use crate::service::{Authorship, KeyCabinet, KeyError, KeyScope, KeyTerms, StoredKey, authored};

/// What to do with access keys.
#[derive(Debug, Subcommand)]
pub enum KeysCommand {
    /// Make a key and print it, this once
    Create(Terms),
    /// List all keys, without their secret parts
    List {
        /// Form of the list
        #[arg(long, value_enum, default_value_t = KeysFormat::Text)]
        format: KeysFormat,
    },
    /// Revoke a key; a service that runs refuses it within two seconds
    Revoke {
        /// Its name or id, or the key itself
        key: String,
        /// Form of the answer
        #[arg(long, value_enum, default_value_t = KeysFormat::Text)]
        format: KeysFormat,
    },
}

/// What a new key allows.
#[derive(Debug, Args)]
pub struct Terms {
    /// What to call it; no two keys in use have one name
    name: String,
    /// What it allows; write reads too, and admin does both and reads the trail of writes
    #[arg(long, value_enum, default_value_t = ScopeName::Read)]
    scope: ScopeName,
    /// Bind it to this network, which may be made later; may be given several times
    #[arg(long = "network", value_name = "NAME")]
    networks: Vec<String>,
    /// Most requests a minute, which may also come at once
    #[arg(long, value_name = "REQUESTS")]
    per_minute: Option<u32>,
    /// Most requests a day, from midnight to midnight UTC
    #[arg(long, value_name = "REQUESTS")]
    per_day: Option<u64>,
    /// When it ends: a date (00:00 UTC), a time (RFC 3339), or how long from now (ISO 8601, as in P90D)
    #[arg(long, value_name = "WHEN", value_parser = expiry)]
    expires: Option<Timestamp>,
    /// Form of the answer
    #[arg(long, value_enum, default_value_t = KeysFormat::Text)]
    format: KeysFormat,
}

/// What a key allows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum ScopeName {
    /// Reading
    Read,
    /// Reading and writing
    Write,
    /// Both, and the trail of writes
    Admin,
}

/// Form of an answer.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum KeysFormat {
    /// For people
    Text,
    /// For scripts
    Json,
}

/// A key as scripts are told.
#[derive(Serialize)]
struct KeyAnswer<'a> {
    id: &'a str,
    name: &'a str,
    scope: &'static str,
    networks: &'a [String],
    per_minute: Option<u32>,
    per_day: Option<u64>,
    created_at: String,
    expires_at: Option<String>,
    last_used_at: Option<String>,
    revoked_at: Option<String>,
    /// The key itself: on the answer to its making alone.
    #[serde(skip_serializing_if = "Option::is_none")]
    key: Option<String>,
}

/// Does as asked.
pub async fn run(database: &DatabaseConfig, command: KeysCommand) -> Result<(), Stop> {
    let cabinet = KeyCabinet::open(database).await.map_err(|error| Stop::failed("the database", error))?;
    let done = dispatch(&cabinet, command).await;
    cabinet.close().await;
    done
}

async fn dispatch(cabinet: &KeyCabinet, command: KeysCommand) -> Result<(), Stop> {
    match command {
        KeysCommand::Create(terms) => create(cabinet, terms).await,
        KeysCommand::List { format } => list(&cabinet.list().await.map_err(stop)?, format),
        KeysCommand::Revoke { key, format } => {
            let revoked = authored(by_command("keys revoke", &key), cabinet.revoke(&key)).await.map_err(stop)?;
            match format {
                KeysFormat::Json => json(&answer(&revoked, None)),
                KeysFormat::Text => say(&format!("revoked {} ({})", revoked.name, revoked.id)),
            }
        }
    }
}

async fn create(cabinet: &KeyCabinet, terms: Terms) -> Result<(), Stop> {
    let Terms { name, scope, networks, per_minute, per_day, expires: expires_at, format } = terms;
    let scope = match scope {
        ScopeName::Read => KeyScope::Read,
        ScopeName::Write => KeyScope::Write,
        ScopeName::Admin => KeyScope::Admin,
    };
    let author = by_command("keys create", &name);
    let terms = KeyTerms { name, scope, networks, per_minute, per_day, expires_at };
    let (credential, key) = authored(author, cabinet.create(terms)).await.map_err(stop)?;
    if format == KeysFormat::Json {
        return json(&answer(&key, Some(credential.reveal())));
    }
    say(&credential.reveal())?;
    // Beside the key, so that the key alone goes through a pipe.
    let mut beside = std::io::stderr();
    let _ = writeln!(
        beside,
        "This is {}, scope {}. It is not shown again: only its digest is kept.",
        key.name,
        key.scope.as_str()
    );
    Ok(())
}

fn list(keys: &[StoredKey], format: KeysFormat) -> Result<(), Stop> {
    if format == KeysFormat::Json {
        return json(&keys.iter().map(|key| answer(key, None)).collect::<Vec<_>>());
    }
    let heads = ["name", "id", "scope", "networks", "a minute", "a day", "last used", "state"];
    let mut rows = vec![heads.map(str::to_owned).to_vec()];
    let now = Timestamp::now();
    for key in keys {
        let or = |text: Option<String>, other: &str| text.unwrap_or_else(|| other.to_owned());
        let state = match (key.revoked_at, key.expires_at) {
            (Some(at), _) => format!("revoked {}", day(at)),
            (None, Some(at)) if at <= now => format!("expired {}", day(at)),
            (None, Some(at)) => format!("until {}", day(at)),
            (None, None) => "in use".to_owned(),
        };
        rows.push(vec![
            key.name.clone(),
            key.id.clone(),
            key.scope.as_str().to_owned(),
            if key.networks.is_empty() { "all".to_owned() } else { key.networks.join(" ") },
            or(key.per_minute.map(|most| most.to_string()), "-"),
            or(key.per_day.map(|most| most.to_string()), "-"),
            or(key.last_used_at.map(day), "never"),
            state,
        ]);
    }
    say(&align(&rows).join("\n"))
}

/// The line of a command in the trail of writes.
fn by_command(command: &str, key: &str) -> Option<Authorship> {
    let path = format!("{command} {}", masked(key));
    let (method, route) = ("COMMAND".to_owned(), command.to_owned());
    Some(Authorship { method, route, path, ..Authorship::default() })
}

fn answer(key: &StoredKey, secret: Option<String>) -> KeyAnswer<'_> {
    KeyAnswer {
        id: &key.id,
        name: &key.name,
        scope: key.scope.as_str(),
        networks: &key.networks,
        per_minute: key.per_minute,
        per_day: key.per_day,
        created_at: key.created_at.to_string(),
        expires_at: key.expires_at.map(|at| at.to_string()),
        last_used_at: key.last_used_at.map(|at| at.to_string()),
        revoked_at: key.revoked_at.map(|at| at.to_string()),
        key: secret,
    }
}

fn json(answer: &impl Serialize) -> Result<(), Stop> {
    say(&serde_json::to_string(answer).map_err(|error| Stop::failed("writing", error))?)
}

fn say(text: &str) -> Result<(), Stop> {
    print_with(|out| writeln!(out, "{text}"))
}

fn day(time: Timestamp) -> String {
    time.to_zoned(TimeZone::UTC).date().to_string()
}

fn stop(error: KeyError) -> Stop {
    match error {
        KeyError::Store(error) => Stop::failed("the database", error),
        refused => Stop::Refused(format!("tailcast: {refused}\n")),
    }
}

/// When a key ends.
fn expiry(text: &str) -> Result<Timestamp, String> {
    if let Ok(time) = text.parse::<Timestamp>() {
        return Ok(time);
    }
    if let Ok(date) = text.parse::<Date>() {
        return date.to_zoned(TimeZone::UTC).map(|zoned| zoned.timestamp()).map_err(|error| error.to_string());
    }
    let from_now = |span: Span| Timestamp::now().to_zoned(TimeZone::UTC).checked_add(span).map(|at| at.timestamp());
    let advice = "give a date (2027-01-01), a time (2027-01-01T12:00:00Z) or how long from now (P90D)";
    text.parse::<Span>().and_then(from_now).map_err(|_| advice.to_owned())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_key_ends_at_a_date_a_time_or_a_while_from_now() {
        assert_eq!(expiry("2027-01-01").unwrap().to_string(), "2027-01-01T00:00:00Z");
        assert_eq!(expiry("2027-01-01T12:00:00+02:00").unwrap().to_string(), "2027-01-01T10:00:00Z");
        let days = (expiry("P90D").unwrap().as_second() - Timestamp::now().as_second()) / 86_400;
        assert!((89..=90).contains(&days), "{days}");
        assert!(expiry("soon").unwrap_err().contains("P90D"));
    }
}

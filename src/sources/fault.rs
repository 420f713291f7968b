//! Why a source's query has no counts, in words that tell nothing of where its database is.

use std::time::Duration;

use sqlx::postgres::{PgDatabaseError, PgErrorPosition};

use crate::model::{CountsFault, CountsFaultKind};

/// Longest message of a database that is repeated, characters.
const LONGEST_MESSAGE: usize = 300;
/// Most faults of one answer that are told.
const MOST_TOLD: usize = 5;

// SQLSTATEs: https://www.postgresql.org/docs/15/errcodes-appendix.html
const READ_ONLY: &str = "25006";
const CANCELLED: &str = "57014";

/// Why a source's query has no counts.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum SourceFault {
    /// No connection could be made.
    #[error("the database cannot be reached: {0}; whoever runs this service has its address in sources.databases")]
    Unreachable(String),
    /// The database stopped answering.
    #[error("the connection to the database broke off while it was counting: {0}")]
    BrokenOff(String),
    /// The time was over.
    #[error(
        "the query took longer than {} s; raise timeout_seconds, or make it faster, with an index or a table of counts kept in the database",
        .0.as_secs()
    )]
    TooSlow(Duration),
    /// It would write.
    #[error("the query would change the database ({0}); a source only reads")]
    Writes(String),
    /// The database refused the query.
    #[error("the database refuses the query{place}: {message} (SQLSTATE {code})")]
    Refused {
        /// Where in the query, when it is known.
        place: String,
        /// What the database says.
        message: String,
        /// Its code.
        code: String,
    },
    /// The answer has more rows than one snapshot may have.
    #[error(
        "the query answers more than {0} rows, the most of one snapshot; count with GROUP BY degree, so that each degree is one row"
    )]
    TooManyRows(usize),
    /// The answer's rows are no degree counts.
    #[error("the query's answer is no degree counts: {0}")]
    NoCounts(String),
}

impl SourceFault {
    /// A connection that was not made. What the server says is not repeated: it names hosts and users.
    pub(super) fn connecting(error: &sqlx::Error) -> Self {
        Self::Unreachable(match error {
            sqlx::Error::Database(inner) => {
                let code = inner.code().unwrap_or_default().into_owned();
                let why = match code.as_str() {
                    "28000" | "28P01" => "it does not let this service's user in",
                    "3D000" => "its server has no database of that name",
                    "53300" => "it has no connection to spare",
                    "57P03" => "it is starting up or shutting down",
                    _ => "it refuses the connection",
                };
                format!("{why} (SQLSTATE {code})")
            }
            sqlx::Error::Io(error) => match error.kind() {
                std::io::ErrorKind::ConnectionRefused => "nothing listens at its address".to_owned(),
                std::io::ErrorKind::TimedOut => "it does not answer".to_owned(),
                kind => kind.to_string(),
            },
            sqlx::Error::Tls(_) => "no secure connection can be made".to_owned(),
            _ => "the connection cannot be made".to_owned(),
        })
    }

    /// A failure to ask within `time`; a place that the server names is one of `alone`, the query where it was sent by itself.
    pub(super) fn asking(error: &sqlx::Error, alone: Option<&str>, time: Duration) -> Self {
        let Some(inner) = error.as_database_error() else {
            return Self::BrokenOff(match error {
                sqlx::Error::Io(error) => error.kind().to_string(),
                _ => "its answer cannot be read".to_owned(),
            });
        };
        let message = shortened(inner.message());
        let code = inner.code().unwrap_or_default().into_owned();
        match code.as_str() {
            READ_ONLY => Self::Writes(message),
            CANCELLED => Self::TooSlow(time),
            _ => {
                let position = inner.try_downcast_ref::<PgDatabaseError>().and_then(PgDatabaseError::position);
                let place = match (alone, position) {
                    (Some(query), Some(PgErrorPosition::Original(at))) => place(query, at),
                    _ => None,
                };
                // Of the columns that were asked for around the query.
                let message = message.replace("counted.", "");
                let message = match code.as_str() {
                    "42703" if place.is_none() => {
                        format!("{message}; the query answers two columns, named degree and nodes")
                    }
                    _ => message,
                };
                Self::Refused { place: place.unwrap_or_default(), message, code }
            }
        }
    }

    /// Rows that are no degree counts; indices are those of rows.
    pub(super) fn rows(faults: &[CountsFault]) -> Self {
        let told = faults.iter().take(MOST_TOLD).map(|fault| match fault.index {
            Some(index) => format!("row {}: {}", index + 1, in_rows(fault)),
            None => fault.to_string(),
        });
        let told = told.collect::<Vec<_>>().join("; ");
        let more = faults.len().saturating_sub(MOST_TOLD);
        Self::NoCounts(if more == 0 { told } else { format!("{told}; and {more} more faults") })
    }
}

/// A fault of a row in the words of tables.
fn in_rows(fault: &CountsFault) -> String {
    match fault.kind {
        CountsFaultKind::Repeated { degree, first } => {
            format!("degree {degree} stands in row {} too; GROUP BY degree", first + 1)
        }
        _ => fault.to_string(),
    }
}

/// Where in the query a character stands, counted from 1.
fn place(query: &str, position: usize) -> Option<String> {
    let before = position.checked_sub(1).filter(|&before| before < query.chars().count())?;
    let (mut line, mut column) = (1, 1);
    for character in query.chars().take(before) {
        if character == '\n' {
            (line, column) = (line + 1, 1);
        } else {
            column += 1;
        }
    }
    Some(format!(" at line {line}, column {column}"))
}

fn shortened(message: &str) -> String {
    match message.char_indices().nth(LONGEST_MESSAGE) {
        Some((end, _)) => format!("{}…", message.get(..end).unwrap_or_default()),
        None => message.to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_place_is_a_line_and_a_column_of_the_query_alone() {
        let query = "SELECT a\nFROM tablé\nWHERE b";
        assert_eq!(place(query, 1).unwrap(), " at line 1, column 1");
        assert_eq!(place(query, 8).unwrap(), " at line 1, column 8");
        assert_eq!(place(query, 15).unwrap(), " at line 2, column 6");
        assert_eq!(place(query, 27).unwrap(), " at line 3, column 7");
        assert_eq!((place(query, 0), place(query, 28)), (None, None));
    }

    #[test]
    fn what_is_no_answer_of_a_server_tells_nothing_of_its_address() {
        let refused = sqlx::Error::Io(std::io::ErrorKind::ConnectionRefused.into());
        assert!(SourceFault::connecting(&refused).to_string().contains("nothing listens"));
        let other = sqlx::Error::Protocol("postgres://hunter2@db".to_owned());
        assert!(!SourceFault::connecting(&other).to_string().contains("hunter2"));
        assert!(!SourceFault::asking(&other, None, Duration::ZERO).to_string().contains("hunter2"));
    }
}

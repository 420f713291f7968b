//! The program: its commands, and how the parts are put together for each.

mod backup;
mod bookkeeping;
mod check;
mod connections;
mod demo;
mod follow;
mod keys;
mod offline;
mod serve;
mod tally;

use std::fmt;
use std::io::{self, BufWriter, Write};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::{Parser, Subcommand, ValueEnum};
use tokio::runtime::Runtime;

use crate::config::{Config, LogConfig};
use crate::service::Service;
use crate::{api, telemetry};
use keys::KeysCommand;
use offline::{Completion, Look};
use tally::TallyOptions;

pub use serve::{Running, start};

/// Forecasts how many hubs a growing network will have, and how sure that is.
#[derive(Debug, Parser)]
#[command(name = "tailcast", version, max_term_width = 100)]
pub struct CommandLine {
    /// Settings to put over the defaults (TOML); TAILCAST_* variables go over both
    #[arg(long, global = true, value_name = "FILE")]
    config: Option<PathBuf>,
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Serve the HTTP API until stopped
    Serve,
    /// Grow an invented network, forecast it through the API, show what came, go on serving
    Demo {
        /// Use a free port and a database that is thrown away, and stop after printing
        #[arg(long)]
        once: bool,
    },
    /// Count a time-ordered link list: degree counts, or all the evidence that a forecast takes
    Tally(TallyOptions),
    /// Answer one forecast here and now: no server, no database
    Forecast {
        /// Request body, as for POST /v1/forecasts; - reads the standard input
        file: PathBuf,
        #[command(flatten)]
        completion: Completion,
        /// Form of the answer
        #[arg(long, value_enum, default_value_t = OutputFormat::Table)]
        format: OutputFormat,
        #[command(flatten)]
        look: Look,
    },
    /// Follow a job of the service at `bind` to its end, then print its result
    Follow {
        /// The job's id, or its address as a 202 gives it
        job: String,
    },
    /// Make, list and revoke access keys
    Keys {
        #[command(subcommand)]
        command: KeysCommand,
    },
    /// Ask the service at `bind` whether it is ready; ends with 0 when it is
    Check,
    /// Print the OpenAPI document
    Openapi,
    /// Bring the database's tables up to date
    Migrate,
    /// Copy the database into FILE, also while the service runs; the copy is checked
    Backup {
        /// Where the copy goes
        file: PathBuf,
        /// Put it in the place of a file that is there already
        #[arg(long)]
        replace: bool,
    },
    /// Put a backup in the database's place, with the service stopped; what stood there is kept beside it
    Restore {
        /// The backup
        file: PathBuf,
    },
}

/// Form of an answer on the standard output.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum OutputFormat {
    /// For people
    Table,
    /// As the HTTP API answers, without id and time
    Json,
    /// One table (RFC 4180), that of the tails or of --part
    Csv,
    /// A chart, that of growth or of --chart
    Svg,
    /// A report of one page
    Html,
}

/// Why a command ended without doing its work.
#[derive(Debug)]
pub enum Stop {
    /// The command failed.
    Failed(String),
    /// The request is at fault; it is told in full already.
    Refused(String),
}

/// Exit code for a request that is at fault.
const REFUSED: u8 = 2;

impl Stop {
    /// A failure while doing something.
    fn failed(doing: &str, error: impl fmt::Display) -> Self {
        Self::Failed(format!("{doing}: {error}"))
    }
}

/// Runs a command; what went wrong is told on the standard error stream.
pub fn run(line: CommandLine) -> ExitCode {
    let (message, code) = match dispatch(line) {
        Ok(()) => return ExitCode::SUCCESS,
        Err(Stop::Failed(message)) => (format!("tailcast: {message}\n"), ExitCode::FAILURE),
        Err(Stop::Refused(message)) => (message, ExitCode::from(REFUSED)),
    };
    // Nothing is left to tell it to when the standard error stream is gone.
    let _ = io::stderr().write_all(message.as_bytes());
    code
}

fn dispatch(line: CommandLine) -> Result<(), Stop> {
    if let Command::Openapi = line.command {
        return print(&api::openapi_text());
    }
    let config = Config::load(line.config.as_deref()).map_err(|error| Stop::failed("settings", error))?;
    match line.command {
        Command::Tally(options) => tally::tally(&options),
        Command::Forecast { file, completion, format, look } => {
            offline::forecast(&config, &file, &completion, &look.of(format)?)
        }
        Command::Openapi => Ok(()),
        Command::Follow { job } => follow::follow(&config, &job),
        Command::Keys { command } => runtime()?.block_on(keys::run(&config.database, command)),
        Command::Check => check::ready(config.bind),
        Command::Migrate => {
            runtime()?.block_on(Service::migrate(&config.database)).map_err(|error| Stop::failed("migration", error))
        }
        Command::Backup { file, replace } => backup::make(&config.database, &file, replace),
        Command::Restore { file } => backup::put_back(&config.database, &file),
        Command::Demo { once } => {
            // The demo's own output is what counts; requests are not logged into it.
            let quiet = LogConfig { filter: "warn".to_owned(), ..config.log.clone() };
            let traces =
                telemetry::start(&quiet, &config.telemetry).map_err(|error| Stop::failed("settings", error))?;
            let shown = runtime()?.block_on(demo::show(config, once));
            traces.end();
            shown
        }
        Command::Serve => {
            let traces =
                telemetry::start(&config.log, &config.telemetry).map_err(|error| Stop::failed("settings", error))?;
            let served = serve::until_stopped(runtime()?, config);
            traces.end();
            served
        }
    }
}

fn runtime() -> Result<Runtime, Stop> {
    Runtime::new().map_err(|error| Stop::failed("the async runtime", error))
}

fn print(text: &str) -> Result<(), Stop> {
    print_with(|out| out.write_all(text.as_bytes()))
}

/// Writes to the standard output; a reader that has read enough is no failure.
fn print_with(write: impl FnOnce(&mut dyn Write) -> io::Result<()>) -> Result<(), Stop> {
    let mut out = BufWriter::new(io::stdout().lock());
    match write(&mut out).and_then(|()| out.flush()) {
        Err(error) if error.kind() != io::ErrorKind::BrokenPipe => Err(Stop::failed("standard output", error)),
        _ => Ok(()),
    }
}

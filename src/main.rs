//! Parse the command line, start.

use std::process::ExitCode;

use clap::Parser;
use tailcast::app::{self, CommandLine};

#[global_allocator]
static ALLOCATOR: mimalloc::MiMalloc = mimalloc::MiMalloc;

fn main() -> ExitCode {
    app::run(CommandLine::parse())
}

//! The real binary as a child process.

use std::io::{BufRead, BufReader, Write};
use std::net::SocketAddr;
use std::path::Path;
use std::process::{Child, Command, Output, Stdio};
use std::sync::{Arc, Mutex};

const BINARY: &str = env!("CARGO_BIN_EXE_tailcast");

/// A served database; killed hard when dropped.
pub struct Served {
    pub child: Child,
    pub address: SocketAddr,
    /// What it has logged.
    pub log: Arc<Mutex<Vec<String>>>,
}

/// The binary with no settings but those of the test.
pub fn command(folder: &Path) -> Command {
    let mut command = Command::new(BINARY);
    for (name, _) in std::env::vars_os() {
        if ["TAILCAST_", "OTEL_"].iter().any(|prefix| name.to_string_lossy().starts_with(prefix)) {
            command.env_remove(name);
        }
    }
    command.current_dir(folder).stdin(Stdio::null());
    command
}

/// Runs a command to its end, with `input` on its standard input.
pub fn run(mut command: Command, input: &str) -> Output {
    let mut child = command.stdin(Stdio::piped()).stdout(Stdio::piped()).stderr(Stdio::piped()).spawn().unwrap();
    // A command that refuses its arguments does not read; that is its right.
    let _ = child.stdin.take().unwrap().write_all(input.as_bytes());
    child.wait_with_output().unwrap()
}

/// Serves the database in `folder` on a free port.
pub fn serve(folder: &Path) -> Served {
    serve_with(folder, &[])
}

/// The same with these variables besides.
pub fn serve_with(folder: &Path, variables: &[(&str, &str)]) -> Served {
    let mut child = command(folder)
        .arg("serve")
        .env("TAILCAST_BIND", "127.0.0.1:0")
        .env("TAILCAST_LOG_FILTER", "warn,tailcast::app=info")
        .envs(variables.iter().copied())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    let mut lines = BufReader::new(child.stderr.take().unwrap()).lines();
    let address = lines
        .find_map(|line| line.unwrap().split_once("serving address=")?.1.trim().parse().ok())
        .expect("the service says where it listens");
    // Read on, so that a full pipe never blocks the service.
    let log = Arc::new(Mutex::new(Vec::new()));
    let kept = log.clone();
    std::thread::spawn(move || {
        lines.map_while(Result::ok).for_each(|line| {
            eprintln!("service: {line}");
            kept.lock().unwrap().push(line);
        });
    });
    Served { child, address, log }
}

impl Served {
    /// Kills it hard, as a crash would.
    pub fn kill(mut self) {
        self.child.kill().unwrap();
        self.child.wait().unwrap();
    }
}

impl Drop for Served {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

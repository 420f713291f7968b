//! The real binary as a child process.

use std::io::{BufRead, BufReader, Write};
use std::net::SocketAddr;
use std::path::Path;
use std::process::{Child, Command, Output, Stdio};
use std::sync::{Arc, Mutex};
use std::thread::JoinHandle;

const BINARY: &str = env!("CARGO_BIN_EXE_tailcast");

/// A served database; killed hard when dropped.
pub struct Served {
    pub child: Child,
    pub address: SocketAddr,
    /// What it has logged.
    pub log: Arc<Mutex<Vec<String>>>,
    reader: Option<JoinHandle<()>>,
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
    let mut begun = Vec::new();
    let address = loop {
        begun.push(lines.next().expect("the service says where it listens").unwrap());
        if let Some(address) = begun.last().and_then(|line| listening(line)) {
            break address;
        }
    };
    // Read on, so that a full pipe never blocks the service.
    let log = Arc::new(Mutex::new(begun));
    let kept = log.clone();
    let reader = std::thread::spawn(move || {
        lines.map_while(Result::ok).for_each(|line| {
            eprintln!("service: {line}");
            kept.lock().unwrap().push(line);
        });
    });
    Served { child, address, log, reader: Some(reader) }
}

/// The address in the line that says where a service listens, in either form.
fn listening(line: &str) -> Option<SocketAddr> {
    let (_, text) = line.split_once("serving address=").or_else(|| line.split_once("\"serving\",\"address\":\""))?;
    text.split('"').next()?.trim().parse().ok()
}

impl Served {
    /// Asks it to stop, waits until it has in good order, and tells all that it logged.
    pub fn stopped(self) -> Vec<String> {
        self.ask_to_stop();
        self.ended()
    }

    /// Waits until it has ended in good order, and tells all that it logged.
    pub fn ended(mut self) -> Vec<String> {
        assert!(self.child.wait().unwrap().success());
        self.reader.take().unwrap().join().unwrap();
        std::mem::take(&mut *self.log.lock().unwrap())
    }

    /// Sends it SIGTERM.
    pub fn ask_to_stop(&self) {
        let asked = Command::new("kill").args(["-TERM", &self.child.id().to_string()]).status().unwrap();
        assert!(asked.success());
    }

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

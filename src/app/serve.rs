//! `serve`: listen, answer, stop in good order.

use std::fs::File;
use std::net::SocketAddr;
use std::time::Duration;

use sd_notify::NotifyState;
use tokio::net::TcpListener;
use tokio::runtime::Runtime;
use tokio::sync::watch;
use tokio::task::JoinHandle;
use tokio::time::timeout;

use super::connections::{self, Terms, room_for};
use super::{Stop, bookkeeping};
use crate::api::{AppState, Front};
use crate::config::{Config, KeysNeeded};
use crate::service::Service;
use crate::telemetry;

/// How long cancelled work gets to notice before the process ends.
const LAST_STEP: Duration = Duration::from_secs(1);

/// A service that is being served.
#[derive(Debug)]
pub struct Running {
    address: SocketAddr,
    service: Service,
    stop: watch::Sender<bool>,
    server: JoinHandle<()>,
    upkeep: JoinHandle<()>,
    sender: JoinHandle<()>,
    runner: JoinHandle<()>,
    sharing: JoinHandle<()>,
    keeper: JoinHandle<()>,
    bookkeeping: JoinHandle<()>,
    drain: Duration,
    grace: Duration,
    /// Held to the end.
    _alone: Option<File>,
}

impl Running {
    /// Where it listens.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// Says at `/readyz` that it stops, serves on for the configured time, then stops listening, finishes what was accepted, within the configured grace, and closes the database.
    pub async fn stop(self) {
        let Self { service, stop, server, upkeep, sender, runner, sharing, keeper, bookkeeping, drain, grace, .. } =
            self;
        service.announce_stop();
        if !drain.is_zero() {
            tracing::info!(
                drain_seconds = drain.as_secs(),
                "not ready any more; serving on until no more is sent here"
            );
            tokio::time::sleep(drain).await;
        }
        let aborted = sender.abort_handle();
        // Nobody listening means the server is gone already.
        let _ = stop.send(true);
        // The sender finishes the calls that are under way; what it does not is sent by the next process.
        if timeout(grace, async { tokio::join!(server, sender, runner) }).await.is_err() {
            tracing::warn!(grace_seconds = grace.as_secs(), "some requests were not finished in time");
        }
        aborted.abort();
        upkeep.abort();
        sharing.abort();
        // A transaction that it is in the middle of is undone.
        keeper.abort();
        bookkeeping.abort();
        service.cancel_all();
        if let Err(error) = service.keys().save_uses().await {
            tracing::warn!(%error, "what access keys have used since it was last stored is not counted");
        }
        service.close().await;
        tracing::info!("stopped");
    }
}

/// Opens the database, listens and serves in the background.
///
/// # Errors
/// When the database cannot be opened or the address is taken.
pub async fn start(config: Config) -> Result<Running, Stop> {
    if let Some(why) = config.access.refusal(config.bind) {
        return Err(Stop::Failed(why));
    }
    // Listening first: when the port is taken, no database file is made.
    let listener = TcpListener::bind(config.bind).await.map_err(|error| address_fault(config.bind, &error))?;
    let address = listener.local_addr().map_err(|error| Stop::failed("the listening address", error))?;
    let metrics = telemetry::start_metrics().map_err(|error| Stop::failed("metrics", error))?;
    let service = Service::open(&config).await.map_err(|error| Stop::failed("the database", error))?;
    let alone = service.keep_alone().map_err(|error| Stop::failed("the database", error))?;
    let resumed = service.resume_jobs().await;
    if let Err(error) = &resumed {
        tracing::warn!(%error, "jobs of the last process cannot be taken up yet; it is tried again");
    }
    let upkeep = tokio::spawn(telemetry::keep_metrics_small(metrics.clone()));
    let mut terms = Terms::from(&config.http);
    terms.most = room_for(terms.most);
    let (drain, grace) = (config.http.drain(), config.http.shutdown_grace());
    let front = Front::new(AppState::new(service.clone(), &config, metrics));
    let (stop, stopped) = watch::channel(false);
    let sender = tokio::spawn(service.clone().send_notices(stopped.clone()));
    let runner = tokio::spawn(service.clone().run_sources(stopped.clone()));
    let sharing = tokio::spawn(service.clone().share_jobs(resumed.is_ok(), stopped.clone()));
    let keeper = tokio::spawn(service.clone().keep_up(stopped.clone()));
    let bookkeeping = tokio::spawn(bookkeeping::keep_books(service.clone(), config.access.audit_time()));
    let server = tokio::spawn(connections::serve(listener, front, terms, stopped));
    tracing::info!(%address, "serving");
    if config.access.keys == KeysNeeded::AnyoneMayReadAndWrite {
        tracing::warn!(%address, "NO ACCESS KEYS ARE ASKED FOR: whoever reaches this address can read and change everything, unless a gateway in front decides who may");
    }
    Ok(Running {
        address,
        service,
        stop,
        server,
        upkeep,
        sender,
        runner,
        sharing,
        keeper,
        bookkeeping,
        drain,
        grace,
        _alone: alone,
    })
}

/// Serves until SIGINT or SIGTERM.
pub fn until_stopped(runtime: Runtime, config: Config) -> Result<(), Stop> {
    let outcome = runtime.block_on(async {
        let running = start(config).await?;
        tell_manager(&NotifyState::Ready);
        stop_signal().await.map_err(|error| Stop::failed("stop signals", error))?;
        tell_manager(&NotifyState::Stopping);
        running.stop().await;
        Ok(())
    });
    runtime.shutdown_timeout(LAST_STEP);
    outcome
}

/// Tells the service manager how the process stands, where it asked to be told (sd_notify, variable NOTIFY_SOCKET).
fn tell_manager(state: &NotifyState<'_>) {
    if let Err(error) = sd_notify::notify(std::slice::from_ref(state)) {
        tracing::warn!(%error, "the service manager could not be told");
    }
}

/// Returns when the process is asked to stop.
pub async fn stop_signal() -> std::io::Result<()> {
    #[cfg(unix)]
    {
        use tokio::signal::unix::{SignalKind, signal};
        let mut terminate = signal(SignalKind::terminate())?;
        tokio::select! {
            outcome = tokio::signal::ctrl_c() => outcome,
            _ = terminate.recv() => Ok(()),
        }
    }
    #[cfg(not(unix))]
    tokio::signal::ctrl_c().await
}

fn address_fault(address: SocketAddr, error: &std::io::Error) -> Stop {
    let advice = match error.kind() {
        std::io::ErrorKind::AddrInUse => {
            "something else listens there already; set bind or TAILCAST_BIND to another port"
        }
        std::io::ErrorKind::PermissionDenied => "this user may not listen there; ports from 1024 up are free to all",
        _ => "set bind or TAILCAST_BIND to an address of this machine",
    };
    Stop::Failed(format!("cannot listen on {address}: {error}; {advice}"))
}

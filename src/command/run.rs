//! `run`: the daemon, from its configuration to its last commit.

use std::net::SocketAddr;
use std::path::Path;

use tokio::net::TcpListener;
use tokio::signal::unix::{SignalKind, signal};

use super::Failure;
use crate::config::Configuration;
use crate::daemon::{Daemon, StartError, Stopped};

/// How a fault names what the user gave: a key in a file, or an argument.
pub(super) struct Named {
    pub(super) listen: String,
    pub(super) data: String,
}

pub(super) fn run(config: &Path) -> Result<(), Failure> {
    start_logging();
    let configuration = Configuration::load(config)?;
    let file = &configuration.file;
    let named = Named {
        listen: format!("{file}: api.listen"),
        data: format!("{file}: node.data_directory"),
    };
    let seed = 0;
    serve(&configuration, configuration.listen, seed, &named, |_address| Ok(()))
}

/// Logs to standard error; `RUST_LOG` sets the level (default `info`).
pub(super) fn start_logging() {
    let filter = tracing_subscriber::EnvFilter::try_from_default_env()
        .unwrap_or_else(|_| tracing_subscriber::EnvFilter::new("info"));
    tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr)
        // Where standard error is gone, telling of it there would panic.
        .log_internal_errors(false)
        .init();
}

/// Starts the daemon, calls `ready` with the address that it serves on, and runs until it is told
/// to stop by SIGINT or SIGTERM.
pub(super) fn serve(
    configuration: &Configuration,
    listen: SocketAddr,
    seed: u64,
    named: &Named,
    ready: impl FnOnce(SocketAddr) -> Result<(), Failure>,
) -> Result<(), Failure> {
    let internal = |error| Failure::new(Failure::INTERNAL, format!("no runtime: {error}"));
    let unserved = |error| {
        let line = format!("{}: cannot listen on {listen}: {error}", named.listen);
        Failure::new(Failure::ADDRESS, format!("{line}; port 0 takes any that is free"))
    };
    let runtime = tokio::runtime::Builder::new_multi_thread()
        .worker_threads(2)
        .enable_all()
        .build()
        .map_err(internal)?;
    runtime.block_on(async {
        // The address first: a second daemon on the same address must not touch the database.
        let listener = TcpListener::bind(listen).await.map_err(unserved)?;
        let address = listener.local_addr().map_err(unserved)?;
        let mut interrupt = signal(SignalKind::interrupt()).map_err(internal)?;
        let mut terminate = signal(SignalKind::terminate()).map_err(internal)?;
        let daemon = Daemon::start(configuration, seed).map_err(|error| match error {
            StartError::History(_) | StartError::Directory(..) => {
                Failure::new(Failure::WRITE, format!("{}: {error}", named.data))
            }
            error => error.into(),
        })?;
        if let Err(failure) = ready(address) {
            daemon.stop();
            return Err(failure);
        }
        tracing::info!("serving on http://{address}/");
        let shutdown = async move {
            tokio::select! {
                _ = interrupt.recv() => {}
                _ = terminate.recv() => {}
            }
            tracing::info!("stopping");
        };
        match daemon.serve(listener, shutdown).await {
            Stopped::Well => Ok(()),
            Stopped::HistoryLost(message) => Err(Failure::new(Failure::WRITE, message)),
            Stopped::Panicked => {
                Err(Failure::new(Failure::INTERNAL, "the detection thread had panicked"))
            }
        }
    })
}

//! `run`: the daemon, from its configuration to its last commit.

use std::net::SocketAddr;
use std::path::Path;

use tokio::net::TcpListener;
use tokio::signal::unix::{SignalKind, signal};

use super::Failure;
use crate::config::Configuration;
use crate::daemon::{Daemon, StartError};

pub(super) fn run(config: &Path) -> Result<(), Failure> {
    start_logging();
    let configuration = Configuration::load(config)?;
    let seed = 0;
    serve(&configuration, configuration.listen, seed, |address| {
        tracing::info!("serving on http://{address}/");
    })
}

/// Logs to standard error; `RUST_LOG` sets the level (default `info`).
pub(super) fn start_logging() {
    let filter = tracing_subscriber::EnvFilter::try_from_default_env()
        .unwrap_or_else(|_| tracing_subscriber::EnvFilter::new("info"));
    tracing_subscriber::fmt().with_env_filter(filter).with_writer(std::io::stderr).init();
}

/// Starts the daemon, calls `ready` with the address that it serves on, and runs until it is told to
/// stop by SIGINT or SIGTERM.
pub(super) fn serve(
    configuration: &Configuration,
    listen: SocketAddr,
    seed: u64,
    ready: impl FnOnce(SocketAddr),
) -> Result<(), Failure> {
    let internal = |error| Failure::new(Failure::INTERNAL, format!("no runtime: {error}"));
    let runtime = tokio::runtime::Builder::new_multi_thread()
        .worker_threads(2)
        .enable_all()
        .build()
        .map_err(internal)?;
    runtime.block_on(async {
        // The address first: a second daemon on the same address must not touch the database.
        let listener =
            TcpListener::bind(listen).await.map_err(|error| StartError::Listen(listen, error))?;
        let address = listener.local_addr().map_err(|error| StartError::Listen(listen, error))?;
        let mut interrupt = signal(SignalKind::interrupt()).map_err(internal)?;
        let mut terminate = signal(SignalKind::terminate()).map_err(internal)?;
        let daemon = Daemon::start(configuration, seed)?;
        ready(address);
        let shutdown = async move {
            tokio::select! {
                _ = interrupt.recv() => {}
                _ = terminate.recv() => {}
            }
            tracing::info!("stopping");
        };
        daemon.serve(listener, shutdown).await;
        Ok(())
    })
}

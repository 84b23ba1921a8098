//! `demo`: a whole node on an invented scene, with nothing to set up.

use std::net::SocketAddr;
use std::path::{Path, PathBuf};

use clap::Args;

use super::run::{Named, serve, start_logging};
use super::{Failure, print};
use crate::config::Configuration;

/// The demo's configuration, as shipped.
const CONFIGURATION: &str = include_str!("../../config/demo.toml");

#[derive(Args)]
pub(super) struct DemoArguments {
    /// Address to serve on; port 0 takes any free one. Default: the shipped configuration's.
    #[arg(long, value_name = "ADDRESS")]
    listen: Option<SocketAddr>,
    /// Folder for the database; it is made where it does not exist.
    #[arg(long, value_name = "FOLDER", default_value = "data/demo")]
    data: PathBuf,
    /// Seed of the scene: the same seed makes the same transmissions.
    #[arg(long, default_value_t = 1)]
    seed: u64,
}

pub(super) fn demo(arguments: &DemoArguments) -> Result<(), Failure> {
    start_logging();
    let mut configuration = Configuration::parse(CONFIGURATION, "demo.toml", Path::new(""))?;
    configuration.data_directory.clone_from(&arguments.data);
    let listen = arguments.listen.unwrap_or(configuration.listen);
    if !listen.ip().is_loopback() {
        let line = format!("--listen: {listen} is not a loopback address, such as 127.0.0.1:0");
        return Err(Failure::new(Failure::USAGE, line));
    }
    let data = arguments.data.display();
    let named = Named { listen: "--listen".to_owned(), data: "--data".to_owned() };
    serve(&configuration, listen, arguments.seed, &named, |address| {
        print(&format!(
            "An invented scene, the Lower Saltmarsh drainage board: nothing here is on the air.\n\
             Open http://{address}/ (history in {data}); Ctrl-C ends it.\n"
        ))
    })
}

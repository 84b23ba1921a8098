//! The command line: arguments in, exit code out. The rooms do the work.
//!
//! Standard output carries what was asked for, standard error everything else. A fault is one line.

mod check;
mod demo;
mod derived;
mod lines;
mod replay;
mod run;
mod summary;

use std::fmt;
use std::io::Write;
use std::path::PathBuf;
use std::process::ExitCode;

use clap::{Args, Parser, Subcommand};

use crate::capture::CaptureError;
use crate::config::ConfigError;
use crate::config::quantity;
use crate::daemon::StartError;
use crate::detection::time::Utc;

/// Watches a block of spectrum and tells which of its channels a secondary radio may use now, for how
/// long that holds, and how they were occupied before.
#[derive(Parser)]
#[command(name = "fallowband", version, after_help = EXIT_CODES)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

const EXIT_CODES: &str = "\
Exit codes: 0 done, 64 wrong arguments, 65 a recording that cannot be used, 69 an address that is in
use, 70 a fault of the program, 73 a file or database that cannot be written, 78 a configuration that
is wrong. Every fault is one line on standard error.

A measurement is no licence to transmit, and a receiver cannot hear a hidden node.";

#[derive(Subcommand)]
enum Command {
    /// Run the node that a configuration describes, until it is told to stop.
    Run(ConfigArgument),
    /// Run a node on an invented scene: no receiver, no configuration.
    Demo(demo::DemoArguments),
    /// Run a SigMF recording through the detector and print what it finds.
    Replay(replay::ReplayArguments),
    /// Check a configuration and print the numbers that follow from it.
    Check(check::CheckArguments),
}

#[derive(Args)]
struct ConfigArgument {
    /// Configuration file (TOML).
    #[arg(long, value_name = "FILE")]
    config: PathBuf,
}

/// Why a command failed: one line, and the exit code that tells what kind of fault it was.
#[derive(Debug)]
struct Failure {
    code: u8,
    line: String,
}

impl Failure {
    const USAGE: u8 = 64;
    const RECORDING: u8 = 65;
    const ADDRESS: u8 = 69;
    const INTERNAL: u8 = 70;
    const WRITE: u8 = 73;
    const CONFIG: u8 = 78;

    fn new(code: u8, line: impl fmt::Display) -> Failure {
        Failure { code, line: line.to_string() }
    }
}

impl From<ConfigError> for Failure {
    fn from(error: ConfigError) -> Failure {
        Failure::new(Failure::CONFIG, error)
    }
}

impl From<CaptureError> for Failure {
    fn from(error: CaptureError) -> Failure {
        let code = match error {
            CaptureError::Thread(_) => Failure::INTERNAL,
            _ => Failure::RECORDING,
        };
        Failure::new(code, error)
    }
}

impl From<StartError> for Failure {
    fn from(error: StartError) -> Failure {
        match error {
            StartError::Config(error) => error.into(),
            StartError::Capture(error) => error.into(),
            StartError::NoSource(_) => Failure::new(Failure::CONFIG, error),
            StartError::Listen(..) => Failure::new(Failure::ADDRESS, error),
            StartError::History(_) | StartError::Directory(..) => {
                Failure::new(Failure::WRITE, error)
            }
        }
    }
}

/// Runs the program; the exit codes are those that `--help` lists.
pub fn main() -> ExitCode {
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(error) => {
            // Asked-for help and version are no fault.
            let code = if error.use_stderr() { Failure::USAGE } else { 0 };
            drop(error.print());
            return ExitCode::from(code);
        }
    };
    let outcome = match arguments.command {
        Command::Run(argument) => run::run(&argument.config),
        Command::Demo(arguments) => demo::demo(&arguments),
        Command::Replay(arguments) => replay::replay(&arguments),
        Command::Check(arguments) => check::check(&arguments),
    };
    match outcome {
        Ok(()) => ExitCode::SUCCESS,
        Err(failure) => {
            // With standard error gone, the exit code still tells.
            drop(writeln!(std::io::stderr(), "fallowband: {}", failure.line));
            ExitCode::from(failure.code)
        }
    }
}

/// A frequency argument, such as `435.1MHz`.
fn frequency_hz(text: &str) -> Result<f64, String> {
    quantity::parse_frequency(text).map_err(|error| error.to_string())
}

/// A moment argument, RFC 3339 with an offset, such as `2026-05-04T06:30:00Z`.
fn moment(text: &str) -> Result<Utc, String> {
    let wanted = "give it as RFC 3339, such as 2026-05-04T06:30:00Z";
    let timestamp: jiff::Timestamp =
        text.parse().map_err(|_| format!("{text:?} is no moment: {wanted}"))?;
    let nanos = timestamp.as_nanosecond();
    i64::try_from(nanos).map(Utc).map_err(|_| format!("{text:?} is out of range: {wanted}"))
}

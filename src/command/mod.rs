//! The command line: arguments in, exit code out. The rooms do the work.
//!
//! Standard output carries what was asked for, standard error everything else. A fault is one line.

mod check;
mod curve;
mod demo;
mod derived;
mod design;
mod designed;
mod lines;
mod prove;
mod proved;
mod replay;
mod run;
mod summary;

use std::fmt;
use std::io::{self, Write};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::error::ErrorKind;
use clap::{Args, CommandFactory, Parser, Subcommand};

use crate::capture::CaptureError;
use crate::config::quantity;
use crate::config::{ConfigError, Configuration};
use crate::daemon::{StartError, open_source};
use crate::detection::plan::Plan;
use crate::detection::time::Utc;
use crate::proof::tally::Outcome;

/// Watches a block of spectrum and tells which of its channels a secondary radio may use now, for
/// how long that holds, and how they were occupied before.
#[derive(Parser)]
#[command(name = "fallowband", version, after_help = EXIT_CODES)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

const EXIT_CODES: &str = "\
Exit codes: 0 done, 1 a proof that fails, 2 a proof that is not decided, 64 wrong arguments, 65 a
recording that cannot be used, 69 an address that cannot be served on, 70 a fault of the program, 73
a file or database that cannot be written, 78 a configuration that is wrong. Every fault is one line
on standard error.

A measurement is no licence to transmit, and a receiver cannot hear a hidden node.";

const DONE: u8 = 0;
const PROOF_FAILED: u8 = 1;
const PROOF_NOT_DECIDED: u8 = 2;

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
    /// Work out a detector before there is one: averages, dwell, threshold, sensitivity, curves.
    Design(Box<design::DesignArguments>),
    /// Try a configuration's detector on noise and signals: does it hold its error rates?
    Prove(prove::ProveArguments),
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
            StartError::Recording(..) => Failure::new(Failure::RECORDING, error),
            StartError::NoSource(_) => Failure::new(Failure::CONFIG, error),
            StartError::Thread(..) => Failure::new(Failure::INTERNAL, error),
            StartError::History(..) | StartError::Directory(..) => {
                Failure::new(Failure::WRITE, error)
            }
        }
    }
}

/// Runs the program; the exit codes are those that `--help` lists.
pub fn main() -> ExitCode {
    // A panic has printed its own line by then; what is left is to say whose fault it was.
    let outcome = std::panic::catch_unwind(dispatch)
        .unwrap_or_else(|_| Err(Failure::new(Failure::INTERNAL, "a fault of the program itself")));
    match outcome {
        Ok(code) => ExitCode::from(code),
        Err(failure) => {
            let line = failure.line.replace(char::is_control, " ");
            // With standard error gone, the exit code still tells.
            drop(writeln!(io::stderr(), "fallowband: {line}"));
            ExitCode::from(failure.code)
        }
    }
}

fn dispatch() -> Result<u8, Failure> {
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(error) if error.use_stderr() => {
            return Err(Failure::new(Failure::USAGE, usage_line(&error)));
        }
        // Asked-for help and version are no fault.
        Err(asked) => return print(&asked.render().to_string()).map(|()| DONE),
    };
    let done = match arguments.command {
        Command::Run(argument) => run::run(&argument.config),
        Command::Demo(arguments) => demo::demo(&arguments),
        Command::Replay(arguments) => replay::replay(&arguments),
        Command::Check(arguments) => check::check(&arguments),
        Command::Design(arguments) => design::design(&arguments),
        Command::Prove(arguments) => {
            return prove::prove(&arguments).map(|outcome| match outcome {
                Outcome::Pass => DONE,
                Outcome::Fail => PROOF_FAILED,
                Outcome::NotDecided => PROOF_NOT_DECIDED,
            });
        }
    };
    done.map(|()| DONE)
}

/// What is wrong with the arguments, in one line.
fn usage_line(error: &clap::Error) -> String {
    if error.kind() == ErrorKind::DisplayHelpOnMissingArgumentOrSubcommand {
        let command = Arguments::command();
        let names: Vec<&str> = command.get_subcommands().map(clap::Command::get_name).collect();
        return format!("no command given: {}; see --help", names.join(", "));
    }
    let text = error.render().to_string();
    // What is wrong stands before the first empty line; usage and hints follow.
    let wrong: Vec<&str> =
        text.lines().take_while(|line| !line.is_empty()).map(str::trim).collect();
    let wrong = wrong.join(" ");
    let wrong = wrong.strip_prefix("error: ").unwrap_or(&wrong);
    let tip = text.lines().find_map(|line| line.trim().strip_prefix("tip: "));
    let tip = tip.map(|tip| format!("; {tip}")).unwrap_or_default();
    format!("{wrong}{tip}; see --help")
}

/// Writes what was asked for to standard output. A reader that has seen enough is no fault.
fn print(text: &str) -> Result<(), Failure> {
    let mut out = io::stdout();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(error) if error.kind() != io::ErrorKind::BrokenPipe => {
            let line = format!("standard output: cannot be written: {error}");
            Err(Failure::new(Failure::WRITE, line))
        }
        _ => Ok(()),
    }
}

/// Tells on standard error what is no fault, but worth knowing.
fn note(text: impl fmt::Display) {
    // Nobody reads it: then there is nobody to tell.
    drop(writeln!(io::stderr(), "fallowband: note: {text}"));
}

/// The plan of a configuration on what its source really delivers; the configuration of a replay
/// has no source, and its own values decide.
fn plan_of(configuration: &Configuration) -> Result<Plan, Failure> {
    let (centre_hz, sample_rate_hz) = match configuration.source {
        Some(_) => {
            let source = open_source(configuration, Utc(0), 0)?;
            (Some(source.centre_hz()), Some(source.sample_rate_hz()))
        }
        None => (None, None),
    };
    Ok(configuration.plan(centre_hz, sample_rate_hz)?)
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

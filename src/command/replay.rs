//! `replay`: a recording through exactly the code that the daemon runs.

use std::fs::File;
use std::io::{self, BufWriter, IsTerminal, Write};
use std::path::{Path, PathBuf};
use std::time::Duration;

use clap::Args;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::summary::Summary;
use super::{Failure, frequency_hz, lines, moment, note, print};
use crate::capture::Source;
use crate::capture::queue::{self, Blocks, CaptureState, Next, WhenFull};
use crate::capture::recording::{Recording, Told};
use crate::config::Configuration;
use crate::daemon::block_samples;
use crate::detection::detector::Detector;
use crate::detection::plan::Plan;
use crate::detection::time::Utc;
use crate::detection::verdict::DwellReport;

/// Blocks on their way between the reading thread and the detector.
const QUEUE_BLOCKS: usize = 8;

#[derive(Args)]
pub(super) struct ReplayArguments {
    /// SigMF recording: its `.sigmf-meta`, its `.sigmf-data`, or the name without ending.
    #[arg(value_name = "RECORDING")]
    recording: PathBuf,
    /// Configuration file (TOML); its receiver and data directory are not used.
    #[arg(long, value_name = "FILE")]
    config: PathBuf,
    /// Write one JSON object per channel and dwell to this new file, or to standard output (-).
    #[arg(long, value_name = "FILE")]
    verdicts: Option<PathBuf>,
    /// Centre frequency of a recording that does not state one, such as 435.1MHz; else the
    /// configuration's receiver.centre is taken.
    #[arg(long, value_name = "FREQUENCY", value_parser = frequency_hz, allow_hyphen_values = true)]
    centre: Option<f64>,
    /// Start of a recording that does not state one (RFC 3339); else times count from 1970.
    #[arg(long, value_name = "MOMENT", value_parser = moment)]
    start: Option<Utc>,
    /// Print the summary as JSON.
    #[arg(long)]
    json: bool,
}

/// Where verdict lines and the summary go. With the lines on standard output, the summary takes the
/// other way.
struct Output {
    verdicts: Option<BufWriter<Box<dyn Write>>>,
    verdicts_name: String,
    summary_to_stderr: bool,
}

pub(super) fn replay(arguments: &ReplayArguments) -> Result<(), Failure> {
    let configuration = Configuration::load(&arguments.config)?;
    let (recording, plan) = open(arguments, &configuration)?;
    for warning in configuration.warnings(&plan) {
        note(warning);
    }
    let mut output = open_output(arguments.verdicts.as_deref())?;
    let bar = progress_bar(recording.samples_total());
    let samples = block_samples(plan.receiver.sample_rate_hz);
    let (blocks, capture) =
        queue::spawn(Box::new(recording), samples, QUEUE_BLOCKS, WhenFull::Wait)?;
    let mut summary = Summary::new(&plan);
    let written = detect(&plan, blocks, &bar, |report| {
        summary.take(report);
        match &mut output.verdicts {
            Some(out) => lines::write_report(out, &plan, report),
            None => Ok(()),
        }
    });
    bar.finish_and_clear();
    capture.status().stop();
    let ended = capture.join();
    let written = written.and_then(|()| output.verdicts.as_mut().map_or(Ok(()), Write::flush));
    match written {
        // Whoever read the lines has seen enough.
        Err(error) if error.kind() == io::ErrorKind::BrokenPipe => return Ok(()),
        Err(error) => {
            let line = format!("{}: cannot be written: {error}", output.verdicts_name);
            return Err(Failure::new(Failure::WRITE, line));
        }
        Ok(()) => {}
    }
    print_summary(&summary, &plan, arguments.json, output.summary_to_stderr)?;
    match ended {
        CaptureState::Failed(message) => Err(Failure::new(Failure::RECORDING, message)),
        _ => Ok(()),
    }
}

fn open(
    arguments: &ReplayArguments,
    configuration: &Configuration,
) -> Result<(Recording, Plan), Failure> {
    let told = Told {
        centre_hz: arguments.centre,
        fallback_centre_hz: configuration.centre_hz(),
        start: arguments.start,
    };
    let recording = Recording::open(&arguments.recording, told)?;
    if !recording.dated() {
        let name = arguments.recording.display();
        note(format_args!(
            "{name}: states no date, so times count from 1970-01-01; tell the start with --start"
        ));
    }
    let plan = configuration.plan(Some(recording.centre_hz()), Some(recording.sample_rate_hz()))?;
    Ok((recording, plan))
}

/// Runs the detector over all blocks; `sink` takes the reports and may end the run with an error.
fn detect(
    plan: &Plan,
    mut blocks: Blocks,
    bar: &ProgressBar,
    mut sink: impl FnMut(&DwellReport) -> io::Result<()>,
) -> io::Result<()> {
    let mut detector = Detector::new(plan);
    let mut outcome = Ok(());
    let mut take = |report: DwellReport| {
        if outcome.is_ok() {
            outcome = sink(&report);
        }
        outcome.is_ok()
    };
    let mut going = true;
    while going {
        match blocks.next(Duration::from_secs(1)) {
            Next::Block(block) => {
                detector.push(block, |report| going = take(report));
                bar.inc(block.samples.len() as u64);
            }
            Next::Nothing => {}
            Next::Ended => break,
        }
    }
    detector.finish(|report| {
        take(report);
    });
    outcome
}

/// Opens the file for verdict lines. One that holds something already is left alone.
fn open_output(path: Option<&Path>) -> Result<Output, Failure> {
    let Some(path) = path else {
        return Ok(Output {
            verdicts: None,
            verdicts_name: String::new(),
            summary_to_stderr: false,
        });
    };
    if path == Path::new("-") {
        return Ok(Output {
            verdicts: Some(BufWriter::new(Box::new(io::stdout()))),
            verdicts_name: "standard output".to_owned(),
            summary_to_stderr: true,
        });
    }
    let name = path.display().to_string();
    let refused = |what: String| Failure::new(Failure::WRITE, format!("{name}: {what}"));
    let unwritable = |error| refused(format!("cannot be written: {error}"));
    // Opened to append: whatever happens between here and the check, nothing is ever cut off.
    let file = File::options().create(true).append(true).open(path).map_err(unwritable)?;
    let metadata = file.metadata().map_err(unwritable)?;
    if metadata.is_file() && metadata.len() > 0 {
        return Err(refused("holds something already; name a new file for --verdicts".to_owned()));
    }
    Ok(Output {
        verdicts: Some(BufWriter::new(Box::new(file))),
        verdicts_name: name,
        summary_to_stderr: false,
    })
}

fn progress_bar(samples: Option<u64>) -> ProgressBar {
    let target = if io::stderr().is_terminal() {
        ProgressDrawTarget::stderr_with_hz(10)
    } else {
        ProgressDrawTarget::hidden()
    };
    let style = ProgressStyle::with_template("{wide_bar} {percent} %, {eta} left")
        .expect("a template that names known fields");
    ProgressBar::with_draw_target(samples, target).with_style(style)
}

fn print_summary(
    summary: &Summary,
    plan: &Plan,
    json: bool,
    to_stderr: bool,
) -> Result<(), Failure> {
    let text = if json {
        let mut text = serde_json::to_string_pretty(&summary.rows(plan)).expect("plain data");
        text.push('\n');
        text
    } else {
        summary.table(plan)
    };
    if to_stderr {
        // Standard error is gone: the lines are what was asked for, and they are out.
        drop(io::stderr().write_all(text.as_bytes()));
        return Ok(());
    }
    print(&text)
}

//! `prove`: does the detector of this configuration hold its error rates? By trials of the real
//! one.
//!
//! The trials are the `proof` room's; here are the threads, the time and the words. No receiver, no
//! history and no network is touched.

use std::io::{self, IsTerminal};
use std::num::NonZero;
use std::path::PathBuf;
use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::mpsc;
use std::time::{Duration, Instant};

use clap::Args;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::design::level;
use super::proved::{self, Facts, Part, Row};
use super::{Failure, plan_of, print};
use crate::config::Configuration;
use crate::config::quantity::{Quantity, format_duration, parse_duration};
use crate::detection::plan::{LevelRef, Plan};
use crate::proof::format::NumberFormat;
use crate::proof::radiometer::{decibels, linear};
use crate::proof::stated::{Stated, default_floor_db, stated};
use crate::proof::tally::{Outcome, Tally, judge_pd, judge_pfa};
use crate::proof::trial::{
    Kind, STEP_SAMPLES_MAX, Signals, Step, Trial, batch_steps, run_batch, step_samples,
};

/// Share of the channels that have a signal at a time where detection is tried.
const SIGNAL_SHARE: f64 = 0.1;

/// How far over the floor the signals lie that `--occupied` asks for (dB).
const OCCUPIED_OVER_FLOOR_DB: f64 = 20.0;

/// Noise alone gets half of the time or all the dwells; each of the four signal runs a quarter of
/// that.
const SIGNAL_RUN_SHARE: u64 = 4;

#[derive(Args)]
pub(super) struct ProveArguments {
    /// Configuration file (TOML).
    #[arg(long, value_name = "FILE")]
    config: PathBuf,
    /// Time to spend, such as 60 or 10min; a plain number is seconds.
    #[arg(long, value_name = "DURATION", value_parser = seconds, default_value = "60s")]
    seconds: f64,
    /// Dwells of noise alone to try instead of a time, and a quarter as many for each of the four
    /// kinds of signal: the counts are then the same on every run.
    #[arg(long, value_name = "COUNT", conflicts_with = "seconds")]
    #[arg(value_parser = clap::value_parser!(u64).range(1..=1_000_000_000))]
    dwells: Option<u64>,
    /// Seed of everything that is drawn.
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// Number format that the samples go through.
    #[arg(long, value_name = "FORMAT", value_parser = number_format, default_value = "ci16_le")]
    format: NumberFormat,
    /// Noise level in the first channel, such as -95dBFS; unless given, noise of some tens of steps
    /// of a 16-bit format or three of an 8-bit one, lower where the protection level asks for it.
    #[arg(long, value_name = "LEVEL", value_parser = level, allow_hyphen_values = true)]
    floor: Option<(f64, LevelRef)>,
    /// Share of the channels that are occupied, 20 dB over the floor, while false alarms are
    /// counted on the others.
    #[arg(long, value_name = "SHARE", value_parser = occupied, default_value = "0")]
    occupied: f64,
    /// Threads; all cores unless given. Counts do not depend on it.
    #[arg(long, value_name = "COUNT", value_parser = clap::value_parser!(u16).range(1..=1024))]
    threads: Option<u16>,
    /// Print the results as JSON.
    #[arg(long)]
    json: bool,
}

fn seconds(text: &str) -> Result<f64, String> {
    let plain = text.parse().ok().filter(|_| text.ends_with(|c: char| c.is_ascii_digit()));
    let value = match plain {
        Some(value) => value,
        None => parse_duration(text).map_err(|error| error.to_string())?,
    };
    match (1.0..=86_400.0).contains(&value) {
        true => Ok(value),
        false => Err(format!("{text:?} is out of range (1 s to 24 h)")),
    }
}

fn number_format(text: &str) -> Result<NumberFormat, String> {
    let known = NumberFormat::ALL.into_iter().find(|format| format.as_str() == text);
    known.ok_or_else(|| {
        let words = NumberFormat::ALL.map(NumberFormat::as_str).join(", ");
        format!("{text:?} is none of {words}")
    })
}

fn occupied(text: &str) -> Result<f64, String> {
    Quantity::Share.parse_in(text, 0.0..=0.5).map_err(|error| error.to_string())
}

/// How long a run goes on.
#[derive(Clone, Copy)]
enum Budget {
    Time(Duration),
    Dwells(u64),
}

pub(super) fn prove(arguments: &ProveArguments) -> Result<Outcome, Failure> {
    let plan = load(arguments)?;
    let stated = stated(&plan, arguments.seed);
    if stated.iter().all(Option::is_none) {
        let line = "no channel has enough other cells to tell its noise floor: nothing to prove";
        let name = arguments.config.display();
        return Err(Failure::new(Failure::CONFIG, format!("{name}: bands: {line}")));
    }
    let facts = facts(arguments, &plan, &stated)?;
    let threads = match arguments.threads {
        Some(threads) => usize::from(threads),
        None => std::thread::available_parallelism().map_or(1, NonZero::get),
    };
    let mut rows = Vec::new();
    let begun = Instant::now();
    let bar = progress_bar(arguments);
    for (number, part) in Part::ALL.into_iter().enumerate() {
        let trial = trial(arguments, &plan, &stated, &facts, part, number as u64);
        let share = if part == Part::Noise { 1 } else { SIGNAL_RUN_SHARE };
        let budget = match arguments.dwells {
            Some(dwells) => Budget::Dwells((dwells / share).max(1)),
            None => Budget::Time(Duration::from_secs_f64(arguments.seconds / 2.0 / share as f64)),
        };
        let tallies = run(&trial, part, budget, threads, &bar);
        rows.extend(judged(&plan, &stated, &facts, part, tallies));
    }
    bar.finish_and_clear();
    // What nobody could have been told passes nothing: the worst of all counts.
    let outcome = rows.iter().filter_map(|row| row.outcome).max().unwrap_or(Outcome::NotDecided);
    let took_s = begun.elapsed().as_secs_f64();
    print(&match arguments.json {
        true => proved::as_json(&facts, &rows, outcome),
        false => proved::in_words(&facts, &rows, outcome, took_s),
    })?;
    Ok(outcome)
}

fn load(arguments: &ProveArguments) -> Result<Plan, Failure> {
    let configuration = Configuration::load(&arguments.config)?;
    let plan = plan_of(&configuration)?;
    let samples = step_samples(&plan);
    if samples > STEP_SAMPLES_MAX {
        let dwell_s = samples as f64 / plan.receiver.sample_rate_hz;
        let line = format!(
            "{}: bands: a dwell of {} holds {samples} samples; a proof takes up to \
             {STEP_SAMPLES_MAX}",
            configuration.file,
            format_duration(dwell_s)
        );
        return Err(Failure::new(Failure::CONFIG, line));
    }
    Ok(plan)
}

/// Noise level and seed, and what goes with every number.
fn facts(
    arguments: &ProveArguments,
    plan: &Plan,
    stated: &[Option<Stated>],
) -> Result<Facts, Failure> {
    let floor_db = match arguments.floor {
        Some((_, level_ref)) if level_ref != plan.level_ref => {
            let (given, own) = (level_ref.as_str(), plan.level_ref.as_str());
            let line = format!("--floor: {given} does not go with a configuration in {own}");
            return Err(Failure::new(Failure::USAGE, line));
        }
        Some((floor_db, _)) => floor_db,
        None => default_floor_db(plan, stated, arguments.format),
    };
    let first_hz = plan.channels[0].bandwidth_hz;
    let noise_power = linear(floor_db) * plan.receiver.sample_rate_hz / first_hz;
    // A full scale of four times the rms of a component: clipping would spoil every dwell.
    if noise_power / 2.0 > 1.0 / 16.0 {
        let line = format!(
            "--floor: {floor_db:.1} {} leaves noise no room: over the whole sample rate it is \
             {:.1} dBFS, and may be -9 dBFS",
            plan.level_ref.as_str(),
            decibels(noise_power)
        );
        return Err(Failure::new(Failure::USAGE, line));
    }
    let rms = (noise_power / 2.0).sqrt();
    Ok(Facts {
        config: arguments.config.display().to_string(),
        seed: arguments.seed,
        format: arguments.format.as_str(),
        level_ref: plan.level_ref.as_str(),
        floor_db,
        noise_power,
        noise_rms_steps: arguments.format.steps().map(|steps| rms * f64::from(steps)),
        occupied: arguments.occupied,
        signal_share: SIGNAL_SHARE,
    })
}

/// The floor in a channel (dB).
fn floor_db(plan: &Plan, facts: &Facts, channel: usize) -> f64 {
    let share = plan.channels[channel].bandwidth_hz / plan.receiver.sample_rate_hz;
    decibels(facts.noise_power * share)
}

fn trial(
    arguments: &ProveArguments,
    plan: &Plan,
    stated: &[Option<Stated>],
    facts: &Facts,
    part: Part,
    number: u64,
) -> Trial {
    let channels = 0..plan.channels.len();
    let signals = |kind, share, power_db: &dyn Fn(usize) -> Option<f64>| Signals {
        kind,
        share,
        powers: channels.clone().map(|channel| power_db(channel).map(linear)).collect(),
    };
    let at_sensitivity = |channel: usize| {
        stated[channel].map(|known| floor_db(plan, facts, channel) + known.sensitivity_db)
    };
    let at_protection = |channel: usize| {
        stated[channel].map(|_| plan.band_of(&plan.channels[channel]).protection_level_db)
    };
    let loud = |channel: usize| Some(floor_db(plan, facts, channel) + OCCUPIED_OVER_FLOOR_DB);
    let signals = match part {
        Part::Noise if facts.occupied == 0.0 => None,
        Part::Noise => Some(signals(Kind::NoiseLike, facts.occupied, &loud)),
        Part::Sensitivity(kind) => Some(signals(kind, SIGNAL_SHARE, &at_sensitivity)),
        Part::Protection(kind) => Some(signals(kind, SIGNAL_SHARE, &at_protection)),
    };
    Trial {
        plan: plan.clone(),
        format: arguments.format,
        noise_power: facts.noise_power,
        signals,
        seed: arguments.seed,
        number,
    }
}

/// What a run has shown of one band.
#[derive(Clone, Copy, Default)]
struct Shown {
    tally: Tally,
    undecided: u64,
}

/// Runs batches on all threads until the budget is spent; by band.
fn run(trial: &Trial, part: Part, budget: Budget, threads: usize, bar: &ProgressBar) -> Vec<Shown> {
    let begun = Instant::now();
    let whole = batch_steps(&trial.plan);
    let next = AtomicU64::new(0);
    let claim = || {
        let batch = next.fetch_add(1, Ordering::Relaxed);
        let steps = match budget {
            // The first is always made: nothing is told of no trial at all.
            Budget::Time(time) if batch > 0 && begun.elapsed() >= time => 0,
            Budget::Time(_) => whole,
            Budget::Dwells(dwells) => dwells.saturating_sub(batch * whole).min(whole),
        };
        (steps > 0).then_some((batch, steps))
    };
    let shown = Mutex::new(vec![Shown::default(); trial.plan.bands.len()]);
    let (done, finished) = mpsc::channel::<()>();
    bar.set_message(part.name());
    std::thread::scope(|scope| {
        for _ in 0..threads {
            let (claim, shown, done) = (&claim, &shown, done.clone());
            scope.spawn(move || {
                while let Some((batch, steps)) = claim() {
                    let steps = run_batch(trial, batch, steps, |_| {});
                    let mut shown = shown.lock().expect("no thread has panicked");
                    for step in &steps {
                        take(&mut shown, step, part);
                    }
                    if let Budget::Dwells(_) = budget {
                        bar.inc(steps.len() as u64);
                    }
                }
                drop(done);
            });
        }
        drop(done);
        // Nothing is ever sent: the channel ends with the last thread.
        let mut told = Duration::ZERO;
        while let Err(mpsc::RecvTimeoutError::Timeout) =
            finished.recv_timeout(Duration::from_millis(200))
        {
            if let Budget::Time(time) = budget {
                let now = begun.elapsed().min(time);
                bar.inc((now - told).as_millis() as u64);
                told = now;
            }
        }
    });
    shown.into_inner().expect("no thread has panicked")
}

fn take(shown: &mut [Shown], step: &Step, part: Part) {
    let counts = if part == Part::Noise { &step.idle } else { &step.occupied };
    for (shown, count) in shown.iter_mut().zip(counts) {
        shown.tally.add(count.detected, count.decided);
        shown.undecided += count.undecided;
    }
}

/// The rows of a part, judged.
fn judged(
    plan: &Plan,
    stated: &[Option<Stated>],
    facts: &Facts,
    part: Part,
    shown: Vec<Shown>,
) -> Vec<Row> {
    let of_band = |band_index: usize| {
        let channels = (0..plan.channels.len())
            .filter(move |channel| plan.channels[*channel].band_index == band_index);
        channels.filter_map(|channel| Some((channel, stated[channel]?)))
    };
    let judge = |(band_index, shown): (usize, Shown)| {
        let band = &plan.bands[band_index];
        let mean = |value: &dyn Fn(usize, Stated) -> f64| {
            let count = of_band(band_index).count();
            let sum: f64 = of_band(band_index).map(|(channel, known)| value(channel, known)).sum();
            (count > 0).then(|| sum / count as f64)
        };
        let least = mean(&|_, known| known.pd_half_decibel_below);
        let over_db = |channel, known: Stated| match part {
            Part::Noise => 0.0,
            Part::Sensitivity(_) => known.sensitivity_db,
            Part::Protection(_) => band.protection_level_db - floor_db(plan, facts, channel),
        };
        Row {
            part,
            band: band.id.clone(),
            asked: if part == Part::Noise { band.pfa } else { band.pd },
            least: if part == Part::Noise { None } else { least.map(|pd| pd.min(band.pd)) },
            level_over_floor_db: mean(&over_db).filter(|_| part != Part::Noise),
            below_sensitivity_db: mean(&|channel, known| {
                known.sensitivity_db - over_db(channel, known)
            })
            .filter(|db| matches!(part, Part::Protection(_)) && *db > 0.0),
            tally: shown.tally,
            undecided: shown.undecided,
            outcome: match part {
                Part::Noise => Some(judge_pfa(&shown.tally, band.pfa)),
                Part::Sensitivity(_) => {
                    least.map(|least| judge_pd(&shown.tally, band.pd, least.min(band.pd)))
                }
                Part::Protection(_) => None,
            },
        }
    };
    shown.into_iter().enumerate().map(judge).collect()
}

fn progress_bar(arguments: &ProveArguments) -> ProgressBar {
    let length = match arguments.dwells {
        Some(dwells) => dwells + 4 * (dwells / SIGNAL_RUN_SHARE).max(1),
        None => (arguments.seconds * 1e3) as u64,
    };
    let target = if io::stderr().is_terminal() {
        ProgressDrawTarget::stderr_with_hz(10)
    } else {
        ProgressDrawTarget::hidden()
    };
    let style = ProgressStyle::with_template("{msg:28} {wide_bar} {percent} %, {eta} left")
        .expect("a template that names known fields");
    ProgressBar::with_draw_target(Some(length), target).with_style(style)
}

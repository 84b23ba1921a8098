//! `design`: what a detector would be worth, before there is one.
//!
//! Closed forms only: it reads no configuration and hears nothing. What a node's own configuration
//! amounts to is told by `check`, and shown by `prove`.

use std::ops::RangeInclusive;
use std::path::PathBuf;

use clap::{Args, ValueEnum};
use serde::Serialize;

use super::check::rounded;
use super::designed::{beside_floor, in_words};
use super::{Failure, curve, print};
use crate::config::idle_offer_share;
use crate::config::quantity::{
    Quantity, format_duration, format_frequency, format_level, format_share, parse_level,
};
use crate::detection::plan::{Band, LevelRef, Policy};
use crate::detection::time::NANOS_PER_SECOND;
use crate::proof::radiometer::{self, LOOKS_MAX, Radiometer, decibels, linear};

/// Share of its bandwidth that a front end is usually good for.
const USABLE_SHARE: f64 = 0.9;

/// A truly idle channel should be on offer for at least this share of time.
const OFFER_SHARE_WANTED: f64 = 0.95;

#[derive(Args)]
pub(super) struct DesignArguments {
    /// Bandwidth in which energy is measured, such as 16kHz.
    #[arg(long, value_name = "FREQUENCY", value_parser = quantity(Quantity::Frequency, 1.0..=1e9))]
    bandwidth: f64,
    /// Noise figure of the receiver, such as 6dB: the floor is kTB at 290 K, raised by it.
    #[arg(long, value_name = "RATIO", value_parser = quantity(Quantity::Ratio, 0.0..=60.0))]
    #[arg(required_unless_present = "floor", conflicts_with = "floor")]
    noise_figure: Option<f64>,
    /// Noise level in the channel instead, such as -95dBFS or -124dBm.
    #[arg(long, value_name = "LEVEL", value_parser = level, allow_hyphen_values = true)]
    floor: Option<(f64, LevelRef)>,
    /// Level at which a first user must be detected; tells the dwell that this takes.
    #[arg(long, value_name = "LEVEL", value_parser = level, allow_hyphen_values = true)]
    #[arg(required_unless_present = "dwell")]
    protection_level: Option<(f64, LevelRef)>,
    /// Dwell length instead, such as 200ms; tells the sensitivity that it gives.
    #[arg(long, value_name = "DURATION")]
    #[arg(value_parser = quantity(Quantity::Duration, 1e-6..=86_400.0))]
    dwell: Option<f64>,
    /// False-alarm probability of one decision.
    #[arg(long, value_name = "SHARE", value_parser = quantity(Quantity::Share, 1e-9..=0.5))]
    #[arg(default_value = "1e-4")]
    pfa: f64,
    /// Detection probability at the protection level.
    #[arg(long, value_name = "SHARE", value_parser = quantity(Quantity::Share, 0.5..=0.9999))]
    #[arg(default_value = "0.9")]
    pd: f64,
    /// How far the noise may lie from the floor either way, such as 0.5dB: gives an SNR wall.
    #[arg(long, value_name = "RATIO", value_parser = quantity(Quantity::Ratio, 0.0..=20.0))]
    #[arg(default_value = "0dB")]
    noise_uncertainty: f64,
    /// Idle channels that the floor is estimated from in the same dwell; without it, it is known.
    #[arg(long, value_name = "COUNT", value_parser = clap::value_parser!(u32).range(1..=100_000))]
    reference_cells: Option<u32>,
    /// Sample rate, such as 2.4MS/s: tells the samples in a dwell.
    #[arg(long, value_name = "RATE", value_parser = quantity(Quantity::SampleRate, 100.0..=1e9))]
    sample_rate: Option<f64>,
    /// Channels to watch: tells the time of a sweep over them.
    #[arg(long, value_name = "COUNT", value_parser = clap::value_parser!(u32).range(1..=1_000_000))]
    channels: Option<u32>,
    /// Distance between channels; the bandwidth unless given.
    #[arg(long, value_name = "FREQUENCY", value_parser = quantity(Quantity::Frequency, 1.0..=1e9))]
    #[arg(requires = "channels")]
    spacing: Option<f64>,
    /// Width that the receiver sees at once; 90 % of the sample rate unless given.
    #[arg(long, value_name = "FREQUENCY", value_parser = quantity(Quantity::Frequency, 1.0..=1e9))]
    usable_bandwidth: Option<f64>,
    /// Time that the receiver takes to retune and settle, in a sweep of several segments.
    #[arg(long, value_name = "DURATION", value_parser = quantity(Quantity::Duration, 0.0..=60.0))]
    #[arg(default_value = "0s")]
    settling: f64,
    /// No offer of a channel for this long after a detection.
    #[arg(long, value_name = "DURATION")]
    #[arg(value_parser = quantity(Quantity::Duration, 0.0..=86_400.0))]
    #[arg(default_value = "60s")]
    hold_off: f64,
    /// A channel must have been idle for this long before it is offered.
    #[arg(long, value_name = "DURATION")]
    #[arg(value_parser = quantity(Quantity::Duration, 0.0..=86_400.0))]
    #[arg(default_value = "2s")]
    check_time: f64,
    /// Print a curve as rows (CSV) instead: Pd against SNR, or Pfa against the threshold.
    #[arg(long, value_enum, value_name = "CURVE")]
    curve: Option<Curve>,
    /// Draw the curve into this new file (SVG), and print the numbers.
    #[arg(long, value_name = "FILE", requires = "curve")]
    svg: Option<PathBuf>,
    /// Print the numbers as JSON.
    #[arg(long)]
    json: bool,
}

/// The two operating curves.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
pub(super) enum Curve {
    /// Detection probability against SNR.
    Pd,
    /// False-alarm probability against the threshold.
    Pfa,
}

/// A parser for a quantity in a range.
fn quantity(
    quantity: Quantity,
    range: RangeInclusive<f64>,
) -> impl Fn(&str) -> Result<f64, String> + Clone + Send + Sync + 'static {
    move |text| quantity.parse_in(text, range.clone()).map_err(|error| error.to_string())
}

/// A level argument with what it refers to.
pub(super) fn level(text: &str) -> Result<(f64, LevelRef), String> {
    let (value_db, level_ref) = parse_level(text).map_err(|error| error.to_string())?;
    if (-250.0..=100.0).contains(&value_db) {
        return Ok((value_db, level_ref));
    }
    let unit = level_ref.as_str();
    Err(format!("{text:?} is out of range (-250 {unit} to 100 {unit})"))
}

/// What a detector of that dwell is worth.
#[derive(Clone, Debug, Serialize)]
pub(super) struct Worth {
    pub(super) looks: f64,
    pub(super) dwell_s: f64,
    pub(super) dwell_samples: Option<f64>,
    pub(super) threshold_over_floor_db: f64,
    pub(super) threshold_db: f64,
    pub(super) sensitivity_over_floor_db: f64,
    pub(super) sensitivity_db: f64,
    /// `None` for an estimated floor or very many looks, where there is no closed form.
    pub(super) sensitivity_constant_envelope_db: Option<f64>,
    /// Time between two looks at one channel (s): the dwell, or the sweep.
    pub(super) revisit_s: f64,
    pub(super) false_detections_per_channel_hour: f64,
    pub(super) idle_offer_share: f64,
}

/// A sweep over more channels than the receiver sees at once.
#[derive(Clone, Debug, Serialize)]
pub(super) struct Sweep {
    pub(super) channels: u32,
    pub(super) channels_per_segment: u32,
    pub(super) segments: u32,
    /// `None` where no dwell is long enough.
    pub(super) sweep_s: Option<f64>,
}

/// Everything that follows from the arguments.
#[derive(Clone, Debug, Serialize)]
pub(super) struct Numbers {
    pub(super) bandwidth_hz: f64,
    pub(super) sample_rate_hz: Option<f64>,
    pub(super) pfa: f64,
    pub(super) pd: f64,
    pub(super) level_ref: &'static str,
    pub(super) floor_db: f64,
    pub(super) noise_uncertainty_db: f64,
    pub(super) reference_cells: Option<u32>,
    pub(super) protection_level_db: Option<f64>,
    pub(super) protection_over_floor_db: Option<f64>,
    /// `None` for a floor without uncertainty: there is no wall.
    pub(super) snr_wall_db: Option<f64>,
    pub(super) protection_above_wall: Option<bool>,
    /// The looks and the dwell that the protection level takes.
    pub(super) looks_needed: Option<u64>,
    pub(super) dwell_needed_s: Option<f64>,
    /// At the dwell given, or else at the one needed; `None` where no dwell is long enough.
    pub(super) dwell: Option<Worth>,
    pub(super) sweep: Option<Sweep>,
}

pub(super) fn design(arguments: &DesignArguments) -> Result<(), Failure> {
    let floor = floor(arguments);
    check(arguments, floor).map_err(|line| Failure::new(Failure::USAGE, line))?;
    let detector = Radiometer {
        pfa: arguments.pfa,
        pd: arguments.pd,
        cells: arguments.reference_cells.map_or(f64::INFINITY, f64::from),
        uncertainty_db: arguments.noise_uncertainty,
    };
    let numbers = numbers(arguments, &detector, floor);
    if let Some(which) = arguments.curve {
        let Some(worth) = &numbers.dwell else {
            return Err(Failure::new(Failure::USAGE, format!("--curve: {}", no_dwell(&numbers))));
        };
        let points = curve::points(which, &detector, worth);
        let Some(path) = &arguments.svg else {
            return print(&curve::rows(which, &numbers, &points));
        };
        curve::write_new(path, &curve::drawing(which, &numbers, worth, &points))?;
    }
    let notes = notes(arguments, &numbers);
    if arguments.json {
        let value = serde_json::json!({ "numbers": numbers, "warnings": notes });
        let text = serde_json::to_string_pretty(&value).expect("plain data");
        return print(&format!("{text}\n"));
    }
    print(&in_words(&numbers, &notes))
}

/// The floor in the channel and what it refers to.
fn floor(arguments: &DesignArguments) -> (f64, LevelRef) {
    match (arguments.floor, arguments.noise_figure) {
        (Some(floor), _) => floor,
        (None, Some(figure)) => (radiometer::noise_dbm(arguments.bandwidth, figure), LevelRef::Dbm),
        (None, None) => unreachable!("one of the two is required"),
    }
}

/// What the arguments must fulfil together.
fn check(arguments: &DesignArguments, (_, floor_ref): (f64, LevelRef)) -> Result<(), String> {
    let DesignArguments { bandwidth, pfa, pd, .. } = *arguments;
    if pd <= pfa {
        let (pd, pfa) = (format_share(pd), format_share(pfa));
        return Err(format!("--pd: {pd} is not above --pfa ({pfa})"));
    }
    if let Some((value_db, level_ref)) = arguments.protection_level
        && level_ref != floor_ref
    {
        return Err(format!(
            "--protection-level: {} does not go with a floor in {}",
            format_level(value_db, level_ref),
            floor_ref.as_str()
        ));
    }
    let width = format_frequency(bandwidth);
    if let Some(dwell_s) = arguments.dwell
        && !(1.0..=LOOKS_MAX).contains(&(dwell_s * bandwidth))
    {
        return Err(format!(
            "--dwell: {} in {width} is out of range ({} to {})",
            format_duration(dwell_s),
            format_duration(1.0 / bandwidth),
            format_duration(LOOKS_MAX / bandwidth)
        ));
    }
    if let Some(rate_hz) = arguments.sample_rate
        && rate_hz < bandwidth
    {
        return Err(format!("--sample-rate: {rate_hz} S/s is less than --bandwidth ({width})"));
    }
    if arguments.spacing.is_some_and(|spacing_hz| spacing_hz < bandwidth) {
        return Err(format!("--spacing: less than --bandwidth ({width})"));
    }
    match (arguments.channels, usable_hz(arguments)) {
        (Some(_), None) => {
            Err("--channels: give --usable-bandwidth or --sample-rate too".to_owned())
        }
        (_, Some(usable_hz)) if usable_hz < bandwidth => Err(format!(
            "--usable-bandwidth: {} does not hold a channel ({width})",
            format_frequency(usable_hz)
        )),
        _ if arguments.json && arguments.curve.is_some() && arguments.svg.is_none() => {
            Err("--curve: rows are CSV; leave out --json, or draw with --svg".to_owned())
        }
        _ => Ok(()),
    }
}

fn usable_hz(arguments: &DesignArguments) -> Option<f64> {
    arguments.usable_bandwidth.or(arguments.sample_rate.map(|rate_hz| USABLE_SHARE * rate_hz))
}

fn numbers(
    arguments: &DesignArguments,
    detector: &Radiometer,
    (floor_db, level_ref): (f64, LevelRef),
) -> Numbers {
    let bandwidth_hz = arguments.bandwidth;
    let over_floor_db = arguments.protection_level.map(|(level_db, _)| level_db - floor_db);
    let wall = radiometer::snr_wall(detector.uncertainty_db);
    let looks_needed = over_floor_db.and_then(|db| detector.looks_for(linear(db)));
    let dwell_needed_s = looks_needed.map(|looks| looks as f64 / bandwidth_hz);
    let dwell_s = arguments.dwell.or(dwell_needed_s);
    let segments = segments(arguments);
    let sweep_s = |dwell_s: f64| match segments {
        // One segment is never left.
        None | Some((_, 1)) => dwell_s,
        Some((_, segments)) => f64::from(segments) * (dwell_s + arguments.settling),
    };
    Numbers {
        bandwidth_hz,
        sample_rate_hz: arguments.sample_rate,
        pfa: detector.pfa,
        pd: detector.pd,
        level_ref: level_ref.as_str(),
        floor_db,
        noise_uncertainty_db: detector.uncertainty_db,
        reference_cells: arguments.reference_cells,
        protection_level_db: arguments.protection_level.map(|(level_db, _)| level_db),
        protection_over_floor_db: over_floor_db,
        snr_wall_db: (wall > 0.0).then(|| decibels(wall)),
        protection_above_wall: over_floor_db.map(|db| linear(db) > wall),
        looks_needed,
        dwell_needed_s,
        dwell: dwell_s.map(|dwell_s| {
            let revisit_s = sweep_s(dwell_s);
            worth(arguments, detector, floor_db, dwell_s, revisit_s)
        }),
        sweep: arguments.channels.zip(segments).map(|(channels, (per_segment, segments))| Sweep {
            channels,
            channels_per_segment: per_segment,
            segments,
            sweep_s: dwell_s.map(sweep_s),
        }),
    }
}

/// Channels in one segment, and segments; a segment holds its channels wholly.
fn segments(arguments: &DesignArguments) -> Option<(u32, u32)> {
    let (channels, usable_hz) = (arguments.channels?, usable_hz(arguments)?);
    let spacing_hz = arguments.spacing.unwrap_or(arguments.bandwidth);
    // Rounding must not lose a channel that fits exactly.
    let beside = ((usable_hz - arguments.bandwidth) / spacing_hz + 1e-9).floor();
    let per_segment = (beside as u32).saturating_add(1).min(channels);
    Some((per_segment, channels.div_ceil(per_segment)))
}

fn worth(
    arguments: &DesignArguments,
    detector: &Radiometer,
    floor_db: f64,
    dwell_s: f64,
    revisit_s: f64,
) -> Worth {
    // A dwell made of whole looks must not lose one to rounding.
    let looks = ((dwell_s * arguments.bandwidth * 1e6).round() / 1e6).max(1.0);
    let threshold_db = decibels(detector.threshold(looks));
    let sensitivity_db = decibels(detector.required_snr(looks));
    let nanos = |seconds: f64| (seconds * NANOS_PER_SECOND as f64) as i64;
    let band = Band {
        id: String::new(),
        pfa: detector.pfa,
        pd: detector.pd,
        protection_level_db: 0.0,
        dwell_s: revisit_s,
        slice_s: revisit_s,
        policy: Policy {
            check_time_ns: nanos(arguments.check_time),
            hold_off_ns: nanos(arguments.hold_off),
            max_age_ns: nanos(2.0 * revisit_s),
        },
    };
    Worth {
        looks,
        dwell_s,
        dwell_samples: arguments.sample_rate.map(|rate_hz| (dwell_s * rate_hz).ceil()),
        threshold_over_floor_db: threshold_db,
        threshold_db: floor_db + threshold_db,
        sensitivity_over_floor_db: sensitivity_db,
        sensitivity_db: floor_db + sensitivity_db,
        sensitivity_constant_envelope_db: detector
            .required_snr_constant_envelope(looks)
            .map(|snr| floor_db + decibels(snr)),
        revisit_s,
        false_detections_per_channel_hour: detector.pfa * 3600.0 / revisit_s,
        idle_offer_share: idle_offer_share(&band),
    }
}

/// Why there is no dwell.
fn no_dwell(numbers: &Numbers) -> String {
    let over_db = numbers.protection_over_floor_db.unwrap_or(f64::NEG_INFINITY);
    match numbers.snr_wall_db {
        Some(wall_db) if over_db <= wall_db => format!(
            "no dwell is long enough: the protection level lies {}, the SNR wall {}",
            beside_floor(over_db),
            beside_floor(wall_db)
        ),
        _ => format!("no dwell of up to {LOOKS_MAX:e} independent looks is long enough"),
    }
}

/// What is most likely not meant, one line each.
fn notes(arguments: &DesignArguments, numbers: &Numbers) -> Vec<String> {
    let mut found = Vec::new();
    let Some(worth) = &numbers.dwell else { return vec![no_dwell(numbers)] };
    if let Some(level_db) = numbers.protection_level_db
        && worth.sensitivity_db > level_db + 1e-9
    {
        let needed = match numbers.dwell_needed_s {
            Some(dwell_s) => format!("it takes {}", format_duration(rounded(dwell_s))),
            None => no_dwell(numbers),
        };
        found.push(format!("this dwell does not reach the protection level: {needed}"));
    }
    if worth.idle_offer_share < OFFER_SHARE_WANTED {
        // Rounded down: 94.96 % must not read as 95.0 %.
        found.push(format!(
            "a truly idle channel would be on offer for {:.1} % of the time only (95 % is wanted): \
             a lower --pfa, a longer --dwell or a hold-off shorter than {} would mend it",
            (worth.idle_offer_share * 1e3).floor() / 10.0,
            format_duration(arguments.hold_off)
        ));
    }
    found
}

//! `check`: is the configuration right, and what does it amount to?

use std::fmt::Write as _;
use std::io::Write as _;
use std::path::PathBuf;

use clap::Args;

use super::Failure;
use super::derived::{BandNumbers, Derived, TRANSMISSIONS_PER_HOUR};
use crate::config::Configuration;
use crate::config::quantity::{
    format_duration, format_frequency, format_sample_rate, format_share,
};
use crate::daemon::open_source;
use crate::detection::time::Utc;

#[derive(Args)]
pub(super) struct CheckArguments {
    /// Configuration file (TOML).
    #[arg(long, value_name = "FILE")]
    config: PathBuf,
    /// Print the numbers as JSON.
    #[arg(long)]
    json: bool,
}

pub(super) fn check(arguments: &CheckArguments) -> Result<(), Failure> {
    let configuration = Configuration::load(&arguments.config)?;
    // What the source really delivers decides, where there is one; a replay's configuration has none.
    let (centre_hz, sample_rate_hz) = match configuration.source {
        Some(_) => {
            let source = open_source(&configuration, Utc(0), 0)?;
            (Some(source.centre_hz()), Some(source.sample_rate_hz()))
        }
        None => (None, None),
    };
    let plan = configuration.plan(centre_hz, sample_rate_hz)?;
    let derived = Derived::new(&plan);
    let warnings = configuration.warnings(&plan);
    let text = if arguments.json {
        let value = serde_json::json!({ "numbers": derived, "warnings": warnings });
        let mut text = serde_json::to_string_pretty(&value).expect("plain data");
        text.push('\n');
        text
    } else {
        in_words(&derived, &warnings)
    };
    // A reader that has seen enough is no fault.
    drop(std::io::stdout().write_all(text.as_bytes()));
    Ok(())
}

fn in_words(derived: &Derived, warnings: &[String]) -> String {
    let mut text = String::new();
    let mut line = |name: &str, value: String| {
        writeln!(text, "{name:<26}{value}").expect("a string takes all");
    };
    line(
        "receiver",
        format!(
            "{} at {}, {} of it usable",
            format_sample_rate(derived.sample_rate_hz),
            format_frequency(derived.centre_hz),
            format_frequency(derived.usable_bandwidth_hz)
        ),
    );
    line(
        "spectrum",
        format!(
            "{} bins of {:.1} Hz, window {}",
            derived.transform_length, derived.bin_width_hz, derived.window
        ),
    );
    for band in &derived.bands {
        band_in_words(band, derived.level_ref, &mut line);
    }
    let mega = |bytes: f64| format!("{:.1} MB", bytes / 1e6);
    line("", String::new());
    line("buffers, all full", mega(derived.buffers_bytes));
    line(
        "database growth per day",
        format!(
            "{} of rollups, {} of runs at {TRANSMISSIONS_PER_HOUR} transmissions an hour on each \
             channel",
            mega(derived.rollups_bytes_per_day),
            mega(derived.runs_bytes_per_day)
        ),
    );
    for warning in warnings {
        line("", String::new());
        line("note", warning.clone());
    }
    text
}

fn band_in_words(band: &BandNumbers, level_ref: &str, line: &mut impl FnMut(&str, String)) {
    line("", String::new());
    line("band", format!("{}, {} channels", band.id, band.channels));
    line("bins per channel", format!("{:.1}", band.bins_per_channel));
    line(
        "dwell",
        format!(
            "{} in {} slices of {}",
            format_duration(rounded(band.dwell_s)),
            band.slices_per_dwell,
            format_duration(rounded(band.slice_s))
        ),
    );
    line(
        "averages per dwell",
        format!(
            "{} transforms overlapping by {:.1} %, worth {:.0} independent looks a channel",
            band.transforms_per_dwell,
            100.0 * band.overlap,
            band.equivalent_looks
        ),
    );
    line("reference cells", format!("{}", band.reference_cells));
    line(
        "threshold",
        format!("{:.2} dB over the floor, for Pfa {:e}", band.threshold_over_floor_db, band.pfa),
    );
    line(
        "sensitivity",
        format!(
            "{:.2} dB relative to the floor, for Pd {}",
            band.sensitivity_over_floor_db, band.pd
        ),
    );
    line(
        "protection level",
        format!(
            "{} {level_ref}: heard while the floor in a channel is at most {:.1} {level_ref}",
            band.protection_level_db, band.floor_max_db
        ),
    );
    line(
        "false detections an hour",
        format!(
            "{:.2} a channel, {:.0} in the band",
            band.false_detections_per_channel_hour, band.false_detections_per_hour
        ),
    );
    line("idle channel on offer", format!("{} of the time", format_share(band.idle_offer_share)));
}

/// Microseconds suffice for people.
fn rounded(seconds: f64) -> f64 {
    (seconds * 1e6).round() / 1e6
}

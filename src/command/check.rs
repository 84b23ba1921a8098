//! `check`: is the configuration right, and what does it amount to?

use std::path::PathBuf;

use clap::Args;

use super::derived::{BandNumbers, Derived, TRANSMISSIONS_PER_HOUR};
use super::{Failure, plan_of, print};
use crate::config::quantity::{
    format_duration, format_frequency, format_sample_rate, format_share,
};
use crate::config::{Configuration, Source};
use crate::daemon::DATABASE_NAME;
use crate::detection::burst::BURST_SHARE;

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
    let plan = plan_of(&configuration)?;
    let derived = Derived::new(&plan);
    let warnings = configuration.warnings(&plan);
    let text = if arguments.json {
        let value = serde_json::json!({ "numbers": derived, "warnings": warnings });
        let mut text = serde_json::to_string_pretty(&value).expect("plain data");
        text.push('\n');
        text
    } else {
        in_words(&configuration, &derived, &warnings)
    };
    print(&text)
}

fn in_words(configuration: &Configuration, derived: &Derived, warnings: &[String]) -> String {
    let mut text = String::new();
    let mut line = |name: &str, value: String| {
        text.push_str(format!("{name:<26}{value}").trim_end());
        text.push('\n');
    };
    let node = &configuration.node;
    line("node", format!("{} at {}", node.name, node.site));
    let source = match &configuration.source {
        Some(Source::Scene { name }) => format!("invented scene {name}"),
        Some(Source::Recording { path }) => format!("recording {}", path.display()),
        None => "none: for replays only".to_owned(),
    };
    line("source", source);
    line("history", configuration.data_directory.join(DATABASE_NAME).display().to_string());
    line("answers", format!("http://{}/", configuration.listen));
    line("", String::new());
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
    line("", String::new());
    line("buffers, all full", size(derived.buffers_bytes));
    line(
        "database growth a day",
        format!(
            "{} of quarter hours, and {} of runs at {TRANSMISSIONS_PER_HOUR} transmissions an hour \
             on each channel",
            size(derived.rollups_bytes_per_day),
            size(derived.runs_bytes_per_day)
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
    let channels = if band.channels == 1 { "channel" } else { "channels" };
    line("band", format!("{}, {} {channels}", band.id, band.channels));
    let worst = &band.least_sensitive_channel;
    line("least sensitive channel", format!("{worst}, {} bins", band.bins_per_channel));
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
        "averages",
        format!(
            "{} transforms a dwell, overlapping by {:.0} %, worth {:.0} independent looks",
            band.transforms_per_dwell,
            100.0 * band.overlap,
            band.equivalent_looks
        ),
    );
    line("reference cells", format!("{} for the noise floor", band.reference_cells));
    levels_in_words(band, level_ref, line);
    line(
        "false detections an hour",
        format!(
            "{} on a channel, {} in the band",
            two_digits(band.false_detections_per_channel_hour),
            two_digits(band.false_detections_per_hour)
        ),
    );
    // Cut off, not rounded: 99.96 % is not all of the time.
    let share = (band.idle_offer_share * 1e3).floor() / 10.0;
    line("idle channel on offer", format!("{share:.1} % of the time"));
}

fn levels_in_words(band: &BandNumbers, level_ref: &str, line: &mut impl FnMut(&str, String)) {
    let (Some(threshold_db), Some(sensitivity_db), Some(floor_max_db)) =
        (band.threshold_over_floor_db, band.sensitivity_over_floor_db, band.floor_max_db)
    else {
        let text = format!(
            "none in {}: other cells are too few to tell its noise floor, so it stays unknown",
            band.least_sensitive_channel
        );
        line("threshold", text);
        return;
    };
    line("threshold", format!("{threshold_db:.2} dB over the floor, for Pfa {:e}", band.pfa));
    if let Some(burst_db) = band.burst_threshold_over_floor_db {
        let share = format_share(BURST_SHARE);
        let text = format!("{burst_db:.1} dB over the floor in one slice, for {share} of the Pfa");
        line("short bursts", text);
    }
    let side = if sensitivity_db < 0.0 { "below" } else { "over" };
    line(
        "sensitivity",
        format!("{:.1} dB {side} the floor, for Pd {}", sensitivity_db.abs(), band.pd),
    );
    line(
        "protection level",
        format!(
            "{} {level_ref}, detected while the noise in the channel is at most {floor_max_db:.1} \
             {level_ref}",
            band.protection_level_db
        ),
    );
}

/// Microseconds suffice for people.
pub(super) fn rounded(seconds: f64) -> f64 {
    (seconds * 1e6).round() / 1e6
}

/// A size in decimal units: `31 kB`, `5.7 MB`.
fn size(bytes: f64) -> String {
    let units = [(1e9, "GB"), (1e6, "MB"), (1e3, "kB")];
    let fitting = units.into_iter().find(|(unit, _)| bytes >= 0.9995 * unit);
    let (unit, name) = fitting.unwrap_or((1.0, "B"));
    format!("{} {name}", two_digits(bytes / unit))
}

/// A number to about two digits: `1.8`, `162`, `0.002`.
pub(super) fn two_digits(value: f64) -> String {
    if value >= 9.95 || value <= 0.0 {
        return format!("{value:.0}");
    }
    // What rounds up to the next power of ten counts as one.
    let decimals = (1.0 - (1.005 * value).log10().floor()).clamp(1.0, 12.0) as usize;
    format!("{value:.decimals$}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_for_people_have_about_two_digits() {
        let texts = [0.0, 1.8e-9, 0.0018, 0.5, 1.8, 9.94, 9.96, 162.4].map(two_digits);
        assert_eq!(texts, ["0", "0.0000000018", "0.0018", "0.50", "1.8", "9.9", "10", "162"]);
        let texts = [0.0, 31_400.0, 999_800.0, 5.72e6, 1.2e10].map(size);
        assert_eq!(texts, ["0 B", "31 kB", "1.0 MB", "5.7 MB", "12 GB"]);
    }
}

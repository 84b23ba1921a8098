//! The numbers of `design` in words: one line each, as `check` writes them.

use super::check::{rounded, two_digits};
use super::design::{Numbers, Worth};
use crate::config::quantity::{format_duration, format_frequency};

/// All numbers and notes, for people.
pub(super) fn in_words(numbers: &Numbers, notes: &[String]) -> String {
    let mut text = String::new();
    let mut line = |name: &str, value: String| {
        text.push_str(format!("{name:<26}{value}").trim_end());
        text.push('\n');
    };
    let unit = numbers.level_ref;
    line("channel", format!("{} wide", format_frequency(numbers.bandwidth_hz)));
    let known = match (numbers.reference_cells, numbers.noise_uncertainty_db) {
        (None, 0.0) => "known exactly".to_owned(),
        (None, off_db) => format!("known to within {off_db} dB either way"),
        (Some(cells), 0.0) => format!("estimated from {cells} idle channels"),
        (Some(cells), off_db) => {
            format!(
                "estimated from {cells} idle channels, then off by up to {off_db} dB either way"
            )
        }
    };
    line("floor in the channel", format!("{:.1} {unit}, {known}", numbers.floor_db));
    if let Some(level_db) = numbers.protection_level_db {
        let over_db = numbers.protection_over_floor_db.expect("both or none");
        line("protection level", format!("{level_db} {unit}, {}", beside_floor(over_db)));
    }
    line(
        "SNR wall",
        match (numbers.snr_wall_db, numbers.protection_above_wall) {
            (None, _) => "none: nothing about the noise is taken as uncertain".to_owned(),
            (Some(wall_db), None) => beside_floor(wall_db),
            (Some(wall_db), Some(above)) => {
                let lies = if above { "above it" } else { "NOT above it" };
                format!("{}: the protection level lies {lies}", beside_floor(wall_db))
            }
        },
    );
    if numbers.looks_needed.is_some() || numbers.dwell.is_some() {
        line("", String::new());
    }
    if let Some(looks) = numbers.looks_needed {
        let dwell = format_duration(rounded(numbers.dwell_needed_s.expect("looks take time")));
        line("needed", format!("{looks} independent looks, a dwell of {dwell}"));
    }
    if let Some(worth) = &numbers.dwell {
        worth_in_words(numbers, worth, &mut line);
    }
    if let Some(sweep) = &numbers.sweep {
        let time = sweep.sweep_s.map_or("no dwell is long enough".to_owned(), |seconds| {
            format_duration(rounded(seconds))
        });
        line(
            "sweep",
            format!(
                "{time} for {} channels in {} of up to {}",
                sweep.channels,
                if sweep.segments == 1 {
                    "one segment".to_owned()
                } else {
                    format!("{} segments", sweep.segments)
                },
                sweep.channels_per_segment
            ),
        );
    }
    for note in notes {
        line("", String::new());
        line("note", note.clone());
    }
    text
}

fn worth_in_words(numbers: &Numbers, worth: &Worth, line: &mut impl FnMut(&str, String)) {
    let unit = numbers.level_ref;
    let samples =
        worth.dwell_samples.map(|samples| format!(", {samples} samples")).unwrap_or_default();
    line(
        "dwell",
        format!(
            "{} for {:.0} independent looks{samples}",
            format_duration(rounded(worth.dwell_s)),
            worth.looks.floor()
        ),
    );
    line(
        "threshold",
        format!(
            "{:.1} {unit}, {:.2} dB over the floor, for Pfa {:e}",
            worth.threshold_db, worth.threshold_over_floor_db, numbers.pfa
        ),
    );
    line(
        "sensitivity",
        format!(
            "{:.1} {unit}, {}, for Pd {} of a noise-like signal",
            worth.sensitivity_db,
            beside_floor(worth.sensitivity_over_floor_db),
            numbers.pd
        ),
    );
    if let Some(level_db) = worth.sensitivity_constant_envelope_db {
        line("", format!("{level_db:.1} {unit} for a signal of constant envelope"));
    }
    line(
        "false detections an hour",
        format!("{} on a channel", two_digits(worth.false_detections_per_channel_hour)),
    );
    let share = (worth.idle_offer_share * 1e3).floor() / 10.0;
    line("idle channel on offer", format!("{share:.1} % of the time"));
}

/// `3.0 dB below the floor`.
pub(super) fn beside_floor(over_db: f64) -> String {
    let side = if over_db < 0.0 { "below" } else { "over" };
    format!("{:.1} dB {side} the floor", over_db.abs())
}

//! The results of `prove`, in words and as JSON.

use serde_json::{Value, json};

use super::check::two_digits;
use crate::config::quantity::format_share;
use crate::proof::stated::SENSITIVITY_TOLERANCE_DB;
use crate::proof::tally::{CONFIDENCE, Outcome, PFA_TOLERANCE, Tally};
use crate::proof::trial::Kind;

/// One kind of trial.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Part {
    /// False alarms on noise.
    Noise,
    /// Detections of signals at the stated sensitivity.
    Sensitivity(Kind),
    /// Detections of signals at the protection level.
    Protection(Kind),
}

impl Part {
    /// All, in their order.
    pub(super) const ALL: [Part; 5] = [
        Part::Noise,
        Part::Sensitivity(Kind::NoiseLike),
        Part::Sensitivity(Kind::Carrier),
        Part::Protection(Kind::NoiseLike),
        Part::Protection(Kind::Carrier),
    ];

    /// What is tried.
    pub(super) fn name(self) -> &'static str {
        match self {
            Part::Noise => "noise alone",
            Part::Sensitivity(Kind::NoiseLike) => "sensitivity, noise-like",
            Part::Sensitivity(Kind::Carrier) => "sensitivity, carrier",
            Part::Protection(Kind::NoiseLike) => "protection level, noise-like",
            Part::Protection(Kind::Carrier) => "protection level, carrier",
        }
    }

    fn rate(self) -> &'static str {
        if self == Part::Noise { "pfa" } else { "pd" }
    }
}

/// What goes with every number.
#[derive(Clone, Debug)]
pub(super) struct Facts {
    pub(super) config: String,
    pub(super) seed: u64,
    pub(super) format: &'static str,
    pub(super) level_ref: &'static str,
    /// Noise in the first channel (dB).
    pub(super) floor_db: f64,
    /// Noise over the whole sample rate (linear).
    pub(super) noise_power: f64,
    /// Of one component; `None` for floats.
    pub(super) noise_rms_steps: Option<f64>,
    pub(super) occupied: f64,
    pub(super) signal_share: f64,
}

/// The result of one kind of trial in one band.
#[derive(Clone, Debug)]
pub(super) struct Row {
    pub(super) part: Part,
    pub(super) band: String,
    /// The rate that the configuration asks for.
    pub(super) asked: f64,
    /// The least that is good enough for a detection rate.
    pub(super) least: Option<f64>,
    pub(super) level_over_floor_db: Option<f64>,
    /// How far the protection level lies below the sensitivity, where it does (dB).
    pub(super) below_sensitivity_db: Option<f64>,
    pub(super) tally: Tally,
    pub(super) undecided: u64,
    /// `None` where nothing is asked.
    pub(super) outcome: Option<Outcome>,
}

pub(super) fn as_json(facts: &Facts, rows: &[Row], outcome: Outcome) -> String {
    let row = |row: &Row| -> Value {
        let (low, high) = row.tally.interval();
        let (independent_low, independent_high) = row.tally.interval_independent();
        json!({
            "trial": row.part.name(),
            "band": row.band,
            "rate": row.part.rate(),
            "asked": row.asked,
            "least": row.least,
            "level_over_floor_db": row.level_over_floor_db,
            "measured": row.tally.rate(),
            "low": low,
            "high": high,
            "independent_low": independent_low,
            "independent_high": independent_high,
            "design_effect": row.tally.design_effect(),
            "detections": row.tally.hits,
            "decisions": row.tally.trials,
            "dwells": row.tally.clusters,
            "undecided": row.undecided,
            "outcome": row.outcome.map(Outcome::as_str),
        })
    };
    let value = json!({
        "config": facts.config,
        "seed": facts.seed,
        "format": facts.format,
        "level_ref": facts.level_ref,
        "floor_db": facts.floor_db,
        "noise_rms_steps": facts.noise_rms_steps,
        "occupied": facts.occupied,
        "signal_share": facts.signal_share,
        "confidence": CONFIDENCE,
        "results": rows.iter().map(row).collect::<Vec<_>>(),
        "outcome": outcome.as_str(),
    });
    format!("{}\n", serde_json::to_string_pretty(&value).expect("plain data"))
}

pub(super) fn in_words(facts: &Facts, rows: &[Row], outcome: Outcome, took_s: f64) -> String {
    let rms = facts
        .noise_rms_steps
        .map_or(String::new(), |rms| format!(", {} steps of the format rms", two_digits(rms)));
    let mut text = format!(
        "{} through {}, seed {}: noise of {:.1} {} in the first channel{rms}; {took_s:.0} s\n",
        facts.config, facts.format, facts.seed, facts.floor_db, facts.level_ref
    );
    if facts.occupied > 0.0 {
        text.push_str(&format!(
            "while false alarms were counted, {} of the channels held a signal\n",
            format_share(facts.occupied)
        ));
    }
    text.push('\n');
    let headings = ["band", "trial", "asked", "measured", "95 % interval", "decisions", "dwells"];
    let mut table = vec![headings.map(str::to_owned).to_vec()];
    table[0].extend(["spread".to_owned(), "outcome".to_owned()]);
    table.extend(rows.iter().map(cells));
    text.push_str(&lined_up(&table));
    text.push('\n');
    let mut line = |told: String| {
        text.push_str(&told);
        text.push('\n');
    };
    for row in rows {
        if row.undecided > 0 {
            let (count, part, band) = (row.undecided, row.part.name(), &row.band);
            line(format!("{band}, {part}: {count} verdicts had no floor or clipped samples"));
        }
        if let Some(db) = row.below_sensitivity_db {
            line(format!(
                "{}, {}: it lies {db:.1} dB below the sensitivity at this floor; a live node would \
                 say unknown, insensitive",
                row.band,
                row.part.name()
            ));
        }
    }
    let wanted = format!(
        "Pfa within {:.0} % of the asked one, Pd at the sensitivity at least that of a signal \
         {SENSITIVITY_TOLERANCE_DB} dB weaker",
        100.0 * PFA_TOLERANCE
    );
    match outcome {
        Outcome::Pass => line(format!("PASS: {wanted}")),
        Outcome::Fail => line(format!("FAIL: not {wanted}")),
        Outcome::NotDecided if rows.iter().any(|row| row.tally.trials == 0) => {
            line("NOT DECIDED: no trial came to a decision where one was wanted".to_owned());
        }
        Outcome::NotDecided => {
            line(format!(
                "NOT DECIDED: too few trials to tell ({wanted}); give more --seconds or --dwells"
            ));
        }
    }
    text
}

fn cells(row: &Row) -> Vec<String> {
    let rate = |value: f64| match row.part {
        Part::Noise => format!("{value:.2e}"),
        _ => format!("{value:.4}"),
    };
    let (low, high) = row.tally.interval();
    let over_db = row.level_over_floor_db.map(|db| format!(" ({db:+.1} dB)")).unwrap_or_default();
    vec![
        row.band.clone(),
        format!("{}{over_db}", row.part.name()),
        match row.part {
            Part::Noise => format!("Pfa {:e}", row.asked),
            _ => format!("Pd {}", row.asked),
        },
        row.tally.rate().map_or("-".to_owned(), rate),
        format!("{} to {}", rate(low), rate(high)),
        row.tally.trials.to_string(),
        row.tally.clusters.to_string(),
        format!("{:.2}", row.tally.design_effect()),
        row.outcome.map_or("-", Outcome::as_str).to_owned(),
    ]
}

/// Rows as text, columns flush left.
fn lined_up(rows: &[Vec<String>]) -> String {
    let columns = rows.first().map_or(0, Vec::len);
    let width = |column: usize| rows.iter().map(|row| row[column].chars().count()).max();
    let widths: Vec<usize> = (0..columns).map(|column| width(column).unwrap_or(0)).collect();
    let mut text = String::new();
    for row in rows {
        let line: Vec<String> =
            row.iter().zip(&widths).map(|(cell, &width)| format!("{cell:<width$}")).collect();
        text.push_str(line.join("  ").trim_end());
        text.push('\n');
    }
    text
}

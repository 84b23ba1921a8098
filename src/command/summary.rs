//! What a replay found, channel by channel.

use serde::Serialize;

use crate::detection::plan::Plan;
use crate::detection::verdict::{DwellReport, Reasons, State};

/// Sums over all dwells of one channel. Times are observed time.
#[derive(Clone, Debug, Default)]
struct Sums {
    dwells: u64,
    occupied_ns: i64,
    idle_ns: i64,
    unknown_ns: i64,
    reasons: Reasons,
    occupied_power: f64,
    power_max_db: Option<f64>,
    floor: f64,
    measured_ns: i64,
    sensitivity_worst_db: Option<f64>,
}

/// One channel's row, as served with `--json`.
#[derive(Serialize)]
pub(super) struct Row {
    channel: String,
    centre_hz: f64,
    bandwidth_hz: f64,
    dwells: u64,
    occupied_s: f64,
    idle_s: f64,
    unknown_s: f64,
    occupancy: Option<f64>,
    power_mean_db: Option<f64>,
    power_max_db: Option<f64>,
    floor_mean_db: Option<f64>,
    sensitivity_worst_db: Option<f64>,
    unknown_reasons: Vec<&'static str>,
}

/// The summary of a whole run.
pub(super) struct Summary {
    sums: Vec<Sums>,
}

impl Summary {
    /// An empty summary for a plan.
    pub(super) fn new(plan: &Plan) -> Summary {
        Summary { sums: vec![Sums::default(); plan.channels.len()] }
    }

    /// Takes in a dwell.
    pub(super) fn take(&mut self, report: &DwellReport) {
        let observed_ns = report.observed_ns;
        for verdict in &report.verdicts {
            let sums = &mut self.sums[verdict.channel_index];
            sums.dwells += 1;
            match verdict.state {
                State::Occupied => sums.occupied_ns += observed_ns,
                State::Idle => sums.idle_ns += observed_ns,
                State::Unknown => {
                    sums.unknown_ns += observed_ns;
                    sums.reasons = sums.reasons.union(verdict.reasons);
                }
            }
            let Some(levels) = verdict.levels else { continue };
            sums.measured_ns += observed_ns;
            sums.floor += observed_ns as f64 * 10f64.powf(levels.floor_db / 10.0);
            sums.sensitivity_worst_db = larger(sums.sensitivity_worst_db, levels.sensitivity_db);
            if verdict.state == State::Occupied {
                sums.occupied_power += observed_ns as f64 * 10f64.powf(levels.power_db / 10.0);
                sums.power_max_db = larger(sums.power_max_db, levels.power_db);
            }
        }
    }

    /// The rows, in the plan's order.
    pub(super) fn rows(&self, plan: &Plan) -> Vec<Row> {
        plan.channels
            .iter()
            .zip(&self.sums)
            .map(|(channel, sums)| {
                let decided_ns = sums.occupied_ns + sums.idle_ns;
                let mean_db = |sum: f64, over_ns: i64| {
                    (over_ns > 0).then(|| round(10.0 * (sum / over_ns as f64).log10(), 2))
                };
                Row {
                    channel: channel.id.clone(),
                    centre_hz: channel.centre_hz,
                    bandwidth_hz: channel.bandwidth_hz,
                    dwells: sums.dwells,
                    occupied_s: seconds(sums.occupied_ns),
                    idle_s: seconds(sums.idle_ns),
                    unknown_s: seconds(sums.unknown_ns),
                    occupancy: (decided_ns > 0)
                        .then(|| round(sums.occupied_ns as f64 / decided_ns as f64, 5)),
                    power_mean_db: mean_db(sums.occupied_power, sums.occupied_ns),
                    power_max_db: sums.power_max_db.map(|value| round(value, 2)),
                    floor_mean_db: mean_db(sums.floor, sums.measured_ns),
                    sensitivity_worst_db: sums.sensitivity_worst_db.map(|value| round(value, 2)),
                    unknown_reasons: sums.reasons.iter().map(|reason| reason.as_str()).collect(),
                }
            })
            .collect()
    }

    /// The table for people: one line a channel, columns lined up.
    pub(super) fn table(&self, plan: &Plan) -> String {
        let unit = plan.level_ref.as_str();
        let decimals = centre_decimals(plan);
        let headings = [
            "channel".to_owned(),
            "centre MHz".to_owned(),
            "occupied s".to_owned(),
            "idle s".to_owned(),
            "unknown s".to_owned(),
            "occupancy".to_owned(),
            format!("power {unit}"),
            format!("floor {unit}"),
            format!("sensitivity {unit}"),
            "unknown because".to_owned(),
        ];
        let cells = |row: Row| {
            let level = |value: Option<f64>| value.map_or("-".to_owned(), |v| format!("{v:.1}"));
            [
                row.channel,
                format!("{:.decimals$}", row.centre_hz / 1e6),
                format!("{:.2}", row.occupied_s),
                format!("{:.2}", row.idle_s),
                format!("{:.2}", row.unknown_s),
                row.occupancy.map_or("-".to_owned(), |share| format!("{:.1} %", 100.0 * share)),
                level(row.power_mean_db),
                level(row.floor_mean_db),
                level(row.sensitivity_worst_db),
                row.unknown_reasons.join(" "),
            ]
        };
        let rows = std::iter::once(headings).chain(self.rows(plan).into_iter().map(cells));
        lined_up(&rows.collect::<Vec<_>>())
    }
}

/// Decimals that all centres need to be told in megahertz, to the hertz at most.
fn centre_decimals(plan: &Plan) -> usize {
    let needs_more = |decimals: usize| {
        let steps = |hz: f64| hz / 10f64.powi(6 - decimals as i32);
        let is_off = |hz: f64| (steps(hz) - steps(hz).round()).abs() > 1e-6;
        plan.channels.iter().any(|channel| is_off(channel.centre_hz))
    };
    (3..6).find(|decimals| !needs_more(*decimals)).unwrap_or(6)
}

/// Rows as text; the first and last columns flush left, the others flush right.
fn lined_up<const COLUMNS: usize>(rows: &[[String; COLUMNS]]) -> String {
    let mut widths = [0; COLUMNS];
    for row in rows {
        for (width, cell) in widths.iter_mut().zip(row) {
            *width = (*width).max(cell.chars().count());
        }
    }
    let mut text = String::new();
    for row in rows {
        let mut line = String::new();
        for (column, (cell, &width)) in row.iter().zip(&widths).enumerate() {
            if column == 0 {
                line.push_str(&format!("{cell:<width$}"));
            } else if column + 1 == COLUMNS {
                line.push_str(&format!("  {cell}"));
            } else {
                line.push_str(&format!("  {cell:>width$}"));
            }
        }
        text.push_str(line.trim_end());
        text.push('\n');
    }
    text
}

fn larger(before: Option<f64>, value: f64) -> Option<f64> {
    Some(before.map_or(value, |before| before.max(value)))
}

fn seconds(nanos: i64) -> f64 {
    round(nanos as f64 * 1e-9, 6)
}

fn round(value: f64, digits: i32) -> f64 {
    let scale = 10f64.powi(digits);
    (value * scale).round() / scale
}

//! The verdict line: one JSON object per channel and dwell.

use std::io::{self, Write};

use serde::Serialize;

use crate::detection::plan::Plan;
use crate::detection::time::Utc;
use crate::detection::verdict::{DwellReport, Verdict};

/// One line. Numbers that were not measured are `null`.
#[derive(Serialize)]
struct VerdictLine<'a> {
    time: String,
    duration_s: f64,
    channel: &'a str,
    centre_hz: f64,
    bandwidth_hz: f64,
    verdict: &'static str,
    level_ref: &'static str,
    power_db: Option<f64>,
    floor_db: Option<f64>,
    threshold_db: Option<f64>,
    sensitivity_db: Option<f64>,
    own: bool,
    reasons: Vec<&'static str>,
}

/// Writes a report's verdicts, a line each.
///
/// # Errors
/// Whatever the writer meets.
pub(super) fn write_report(
    out: &mut impl Write,
    plan: &Plan,
    report: &DwellReport,
) -> io::Result<()> {
    let time = rfc3339(report.start.utc);
    for verdict in &report.verdicts {
        let line = verdict_line(plan, report, verdict, &time);
        serde_json::to_writer(&mut *out, &line)?;
        out.write_all(b"\n")?;
    }
    Ok(())
}

fn verdict_line<'a>(
    plan: &'a Plan,
    report: &DwellReport,
    verdict: &Verdict,
    time: &str,
) -> VerdictLine<'a> {
    let channel = &plan.channels[verdict.channel_index];
    let levels = verdict.levels;
    VerdictLine {
        time: time.to_owned(),
        duration_s: report.observed_ns as f64 / 1e9,
        channel: &channel.id,
        centre_hz: channel.centre_hz,
        bandwidth_hz: channel.bandwidth_hz,
        verdict: verdict.state.as_str(),
        level_ref: plan.level_ref.as_str(),
        power_db: levels.map(|levels| to_thousandths(levels.power_db)),
        floor_db: levels.map(|levels| to_thousandths(levels.floor_db)),
        threshold_db: levels.map(|levels| to_thousandths(levels.threshold_db)),
        sensitivity_db: levels.map(|levels| to_thousandths(levels.sensitivity_db)),
        own: verdict.own(),
        reasons: verdict.reasons.iter().map(|reason| reason.as_str()).collect(),
    }
}

fn to_thousandths(value: f64) -> f64 {
    (value * 1e3).round() / 1e3
}

/// A moment as RFC 3339 in UTC, to the microsecond.
pub(super) fn rfc3339(moment: Utc) -> String {
    match jiff::Timestamp::from_nanosecond(i128::from(moment.0)) {
        Ok(timestamp) => format!("{timestamp:.6}"),
        Err(_) => unreachable!("64 bits of nanoseconds lie within the calendar"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn moments_are_rfc_3339_in_utc_to_the_microsecond() {
        assert_eq!(rfc3339(Utc(0)), "1970-01-01T00:00:00.000000Z");
        assert_eq!(rfc3339(Utc(1_777_852_800_200_000_000)), "2026-05-04T00:00:00.200000Z");
        assert_eq!(rfc3339(Utc(i64::MAX)), "2262-04-11T23:47:16.854775Z");
        assert_eq!(rfc3339(Utc(i64::MIN)), "1677-09-21T00:12:43.145224Z");
    }
}

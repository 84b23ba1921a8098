//! A signal that fills the whole block looks like noise: what the segment remembers must tell.

mod support;

use fallowband::detection::detector::Detector;
use fallowband::detection::plan::Plan;
use fallowband::detection::verdict::{DwellReport, Reason, State};
use support::{Noise, first_block, plan};

const NOISE: f64 = 1e-3;
const RATE_HZ: f64 = 1.2e6;
/// Noise power in a channel of 16 kHz (dBFS).
const FLOOR_DB: f64 = -30.0 - 18.75;

/// Dwells of 100 ms; the protection level lies `over_floor_db` over the noise in a channel.
fn plan_with(over_floor_db: f64) -> Plan {
    let mut plan = plan(RATE_HZ, 45);
    plan.bands[0].dwell_s = 0.1;
    plan.bands[0].pfa = 1e-4;
    plan.bands[0].protection_level_db = FLOOR_DB + over_floor_db;
    plan
}

/// One report per entry of `gains_db`: white noise over the whole block, so much over [`NOISE`].
fn reports_of(plan: &Plan, seed: u64, gains_db: impl Iterator<Item = f64>) -> Vec<DwellReport> {
    let mut noise = Noise::new(seed, NOISE);
    let mut detector = Detector::new(plan);
    let dwell = detector.segments()[0].timing().dwell_samples();
    let mut reports = Vec::new();
    for (index, gain_db) in gains_db.enumerate() {
        let amplitude = 10f64.powf(gain_db / 20.0) as f32;
        let samples = noise.samples(dwell).into_iter().map(|x| x * amplitude).collect();
        let mut block = first_block(samples);
        block.gap_before = index == 0;
        detector.push(&block, |report| reports.push(report));
    }
    detector.finish(|report| reports.push(report));
    reports
}

fn share(reports: &[DwellReport], is: impl Fn(State, Reason) -> bool) -> f64 {
    let verdicts = reports.iter().flat_map(|report| &report.verdicts);
    let (mut hits, mut all) = (0, 0);
    for verdict in verdicts {
        all += 1;
        let raised = verdict.reasons.contains(Reason::FloorRaised);
        hits +=
            usize::from(is(verdict.state, if raised { Reason::FloorRaised } else { Reason::Own }));
    }
    hits as f64 / f64::from(all)
}

#[test]
fn a_signal_that_fills_the_block_is_never_called_idle_over_the_protection_level() {
    // It rises by 10 dB, so its level in a channel is 9 times the noise: 9.5 dB over it. The
    // protection level lies below that, and well above what a dwell can hear.
    for over_floor_db in [-5.0, 0.0, 5.0, 9.0] {
        let plan = plan_with(over_floor_db);
        let gains = (0..20).map(|_| 0.0).chain((0..600).map(|_| 10.0));
        let reports = reports_of(&plan, 61, gains);
        let (before, during) = reports.split_at(20);
        assert_eq!(share(before, |state, _| state == State::Unknown), 0.0);
        // The first dwell that holds the new level may straddle it by a transform.
        let during = &during[1..];
        assert_eq!(share(during, |state, _| state == State::Idle), 0.0, "{over_floor_db}");
        assert!(share(during, |_, reason| reason == Reason::FloorRaised) > 0.99);
    }
}

#[test]
fn a_gain_step_that_could_hide_no_protected_signal_stays_idle() {
    // Up by 6 dB: what could hide is 3 times the noise, 4.8 dB over it; protected from 8 dB on.
    let plan = plan_with(8.0);
    let gains = (0..60).map(|index| if (index / 20) % 2 == 1 { 6.0 } else { 0.0 });
    let reports = reports_of(&plan, 62, gains);
    assert!(share(&reports, |state, _| state == State::Idle) > 0.98);
}

#[test]
fn a_floor_that_falls_and_comes_back_is_no_rise() {
    let plan = plan_with(-5.0);
    let gains = (0..90).map(|index| if (30..60).contains(&index) { -6.0 } else { 0.0 });
    let reports = reports_of(&plan, 63, gains);
    assert_eq!(share(&reports, |_, reason| reason == Reason::FloorRaised), 0.0);
}

#[test]
fn a_floor_that_has_been_low_for_a_minute_is_the_accepted_one() {
    // Low for 70 s, then up by 6 dB: a signal that fills the block could hide in that.
    let plan = plan_with(-5.0);
    let gains = (0..730).map(|index| if (10..710).contains(&index) { -6.0 } else { 0.0 });
    let reports = reports_of(&plan, 64, gains);
    let last = &reports[reports.len() - 5..];
    assert!(share(last, |_, reason| reason == Reason::FloorRaised) > 0.99);
}

#[test]
fn a_drift_of_3_db_an_hour_is_followed() {
    // Ten minutes of drift, two dwells a second of it shown: half a decibel in all.
    let plan = plan_with(-8.0);
    let gains = (0..600).map(|index| 0.5 * f64::from(index) / 600.0);
    let reports = reports_of(&plan, 65, gains);
    assert_eq!(share(&reports, |_, reason| reason == Reason::FloorRaised), 0.0);
}

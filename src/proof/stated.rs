//! What the detector states of itself: thresholds and sensitivities over the floor, as its own
//! reports give them on noise alone.

use super::format::NumberFormat;
use super::radiometer::{decibels, linear};
use super::trial::{Trial, run_batch};
use crate::detection::detector::Detector;
use crate::detection::plan::Plan;
use crate::detection::statistics::quadratic::GammaSum;

/// What is stated of one channel, over the floor in it; means over some dwells of noise.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stated {
    /// Threshold (dB).
    pub threshold_db: f64,
    /// Power of a signal alone that is detected with the required probability (dB).
    pub sensitivity_db: f64,
    /// The detection probability of a noise-like signal half a decibel weaker.
    pub pd_half_decibel_below: f64,
}

/// How far below the stated sensitivity a signal may lie to be detected as required (dB).
pub const SENSITIVITY_TOLERANCE_DB: f64 = 0.5;

/// Dwells that the means are taken over.
const DWELLS: u64 = 4;

/// What the detector of a plan states, by channel; `None` where noise alone does not tell it a
/// floor.
pub fn stated(plan: &Plan, seed: u64) -> Vec<Option<Stated>> {
    let trial = Trial {
        plan: plan.clone(),
        format: NumberFormat::Cf32Le,
        noise_power: 1e-4,
        signals: None,
        seed,
        number: u64::MAX,
    };
    let mut sums = vec![(0.0, 0.0, 0.0); plan.channels.len()];
    run_batch(&trial, 0, DWELLS, |report| {
        for verdict in &report.verdicts {
            let Some(levels) = verdict.levels else { continue };
            let sum = &mut sums[verdict.channel_index];
            sum.0 += levels.threshold_db - levels.floor_db;
            sum.1 += levels.sensitivity_db - levels.floor_db;
            sum.2 += 1.0;
        }
    });
    let looks = looks(plan);
    sums.iter()
        .zip(looks)
        .map(|((threshold_db, sensitivity_db, dwells), (energy, floor))| {
            (*dwells > 0.0).then(|| {
                let (threshold_db, sensitivity_db) =
                    (threshold_db / dwells, sensitivity_db / dwells);
                let weaker = 1.0 + linear(sensitivity_db - SENSITIVITY_TOLERANCE_DB);
                let ratio = linear(threshold_db) / weaker;
                let energy = GammaSum::of_looks(energy);
                let pd = energy.ratio_upper_tail(&GammaSum::of_looks(floor), ratio);
                Stated { threshold_db, sensitivity_db, pd_half_decibel_below: pd }
            })
        })
        .collect()
}

/// Looks of each channel's energy and of the floor that it is held against.
fn looks(plan: &Plan) -> Vec<(f64, f64)> {
    let mut found = vec![(1.0, 1.0); plan.channels.len()];
    for segment in Detector::new(plan).segments() {
        let slices = segment.timing().slices;
        let channels: Vec<usize> =
            segment.layout().channels.iter().map(|channel| channel.channel_index).collect();
        let decision = segment.decision(slices);
        for (place, channel) in channels.into_iter().enumerate() {
            found[channel] = (decision.looks(place), decision.reference_looks());
        }
    }
    found
}

/// The noise level in a channel (dB, full scale = 1) at which a proof is made unless another is
/// asked for: noise of a few tens of steps of a 16-bit format or a few of an 8-bit one, but, where
/// the format allows it, low enough to leave the protection level 3 dB over every sensitivity.
pub fn default_floor_db(plan: &Plan, stated: &[Option<Stated>], format: NumberFormat) -> f64 {
    let channel_hz = plan.channels[0].bandwidth_hz;
    let per_channel_db = decibels(channel_hz / plan.receiver.sample_rate_hz);
    let leaves = |(channel, stated): (&crate::detection::plan::Channel, &Option<Stated>)| {
        let stated = (*stated)?;
        let width_db = decibels(channel_hz / channel.bandwidth_hz);
        let protection_db = plan.band_of(channel).protection_level_db;
        Some(protection_db - stated.sensitivity_db - 3.0 + width_db)
    };
    let highest_db =
        plan.channels.iter().zip(stated).filter_map(leaves).fold(f64::INFINITY, f64::min);
    let at_steps =
        |rms: f64, steps: f32| decibels(2.0 * (rms / f64::from(steps)).powi(2)) + per_channel_db;
    let (least, most) = match format {
        NumberFormat::Ci16Le => (4.0, 32.0),
        NumberFormat::Ci8 | NumberFormat::Cu8 => (3.0, 3.0),
        // Floats have no steps: those of 16 bits will do.
        NumberFormat::Cf32Le => (1e-3, 32.0),
    };
    let steps = format.steps().unwrap_or(32_768.0);
    highest_db.clamp(at_steps(least, steps), at_steps(most, steps))
}

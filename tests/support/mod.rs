//! What several tests share: plans, noise, and the detector run over samples.
#![allow(dead_code, missing_docs, unreachable_pub, reason = "each test file uses its own part")]

use fallowband::detection::block::SampleBlock;
use fallowband::detection::detector::Detector;
use fallowband::detection::plan::{
    Band, Channel, FloorEstimator, FloorSettings, FloorTrend, LevelRef, Plan, Policy, Receiver,
    SpectrumSettings,
};
use fallowband::detection::time::{Stamp, Utc};
use fallowband::detection::verdict::DwellReport;
use fallowband::detection::window::Window;
use num_complex::Complex32;
use rand_core::SeedableRng;
use rand_distr::{Distribution, StandardNormal};
use rand_xoshiro::Xoshiro256PlusPlus;

/// 2026-05-04T00:00:00Z, a Monday.
pub const START: Stamp = Stamp { utc: Utc(1_777_852_800_000_000_000), monotonic_ns: 5_000_000_000 };

/// A block of `channels` channels of 16 kHz on a 25 kHz raster, at `sample_rate_hz`.
pub fn plan(sample_rate_hz: f64, channels: usize) -> Plan {
    let centre_hz = 448.1e6;
    let first_hz = centre_hz - 12.5e3 * (channels as f64 - 1.0);
    Plan {
        receiver: Receiver {
            centre_hz,
            sample_rate_hz,
            usable_bandwidth_hz: 0.96 * sample_rate_hz,
            dc_guard_hz: 0.0,
        },
        spectrum: SpectrumSettings {
            window: Window::BlackmanHarris,
            overlap: 0.75,
            transform_length: (sample_rate_hz / 1_200.0).log2().ceil().exp2() as usize,
        },
        floor: FloorSettings {
            estimator: FloorEstimator::Excision { rejection: 0.01 },
            trend: FloorTrend::Slope,
        },
        level_ref: LevelRef::Dbfs,
        bands: vec![Band {
            id: "saltmarsh".to_string(),
            pfa: 1e-3,
            pd: 0.9,
            protection_level_db: 0.0,
            dwell_s: 0.02,
            slice_s: 0.01,
            policy: Policy {
                check_time_ns: 2_000_000_000,
                hold_off_ns: 60_000_000_000,
                max_age_ns: 1_000_000_000,
            },
        }],
        channels: (0..channels)
            .map(|index| Channel {
                id: format!("S{:02}", index + 1),
                band_index: 0,
                centre_hz: first_hz + 25e3 * index as f64,
                bandwidth_hz: 16e3,
                protected: false,
            })
            .collect(),
    }
}

/// Complex white Gaussian noise of a given power, from a seed.
pub struct Noise {
    rng: Xoshiro256PlusPlus,
    amplitude: f32,
}

impl Noise {
    pub fn new(seed: u64, power: f64) -> Noise {
        let amplitude = (power / 2.0).sqrt() as f32;
        Noise { rng: Xoshiro256PlusPlus::seed_from_u64(seed), amplitude }
    }

    pub fn real(&mut self) -> f32 {
        StandardNormal.sample(&mut self.rng)
    }

    pub fn sample(&mut self) -> Complex32 {
        Complex32::new(self.real(), self.real()) * self.amplitude
    }

    pub fn samples(&mut self, count: usize) -> Vec<Complex32> {
        (0..count).map(|_| self.sample()).collect()
    }
}

/// A block of consecutive samples that starts a run.
pub fn first_block(samples: Vec<Complex32>) -> SampleBlock {
    SampleBlock { samples, start: START, gap_before: true, clipped: 0 }
}

/// Runs `count` blocks of `block_samples` samples, made by `fill`, through a new detector.
pub fn detect(
    plan: &Plan,
    count: usize,
    block_samples: usize,
    mut fill: impl FnMut(usize) -> Vec<Complex32>,
) -> Vec<DwellReport> {
    let mut detector = Detector::new(plan);
    let mut reports = Vec::new();
    for index in 0..count {
        let samples = fill(index);
        assert_eq!(samples.len(), block_samples);
        let block = SampleBlock { gap_before: index == 0, ..first_block(samples) };
        detector.push(&block, |report| reports.push(report));
    }
    reports
}

/// A record of white noise (`noise_power` over the whole block) with noise-like signals that fill
/// the channels for which `snr_db` gives a ratio over the noise in the channel. Signals are made
/// bin by bin over the whole record, so their edges are sharp and their power is exact on average.
pub fn record(
    plan: &Plan,
    count: usize,
    noise_power: f64,
    noise: &mut Noise,
    snr_db: impl Fn(usize) -> Option<f64>,
) -> Vec<Complex32> {
    let rate_hz = plan.receiver.sample_rate_hz;
    let bin_hz = rate_hz / count as f64;
    let mut spectrum = vec![Complex32::default(); count];
    for (index, channel) in plan.channels.iter().enumerate() {
        let Some(snr_db) = snr_db(index) else { continue };
        let per_bin = 10f64.powf(snr_db / 10.0) * noise_power / count as f64;
        let (low_hz, high_hz) = channel.edges_hz();
        let bin = |hz: f64| ((hz - plan.receiver.centre_hz) / bin_hz).round() as i64;
        let mut source = Noise { amplitude: (per_bin / 2.0).sqrt() as f32, rng: noise.rng.clone() };
        for k in bin(low_hz)..bin(high_hz) {
            spectrum[k.rem_euclid(count as i64) as usize] = source.sample();
        }
        noise.rng = source.rng;
    }
    rustfft::FftPlanner::new().plan_fft_inverse(count).process(&mut spectrum);
    let background = Noise { amplitude: (noise_power / 2.0).sqrt() as f32, rng: noise.rng.clone() };
    let mut background = background;
    for value in &mut spectrum {
        *value += background.sample();
    }
    noise.rng = background.rng;
    spectrum
}

//! The signal of one user near zero frequency, at a rate just wide enough for one channel.
//!
//! Every user is a frequency-modulated carrier of constant envelope: random levels, smoothed by a
//! cubic B-spline, steer its frequency. The spline is a convex mean, so the deviation never passes
//! its peak, and its spectrum falls with the eighth power of frequency, so the skirts of a strong
//! user stay in its own channel. It must never keep state that depends on the size of a block.

use num_complex::Complex32;
use rand_distr::{Distribution, StandardUniform};
use rand_xoshiro::Xoshiro256PlusPlus;

use super::spec::User;
use super::timeline::Transmission;

/// Samples of the scene for one sample of a source.
pub(super) const DECIMATION: usize = 64;

/// Length of the key's ramps, inside the time on (s). A raised cosine of 1 ms keeps what
/// the key throws into the next channel more than 90 dB down, over a slice of 10 ms.
pub(super) const RAMP_S: f64 = 1e-3;

/// Levels a second of voice [Hz]: twice the highest audio frequency of 3 kHz.
const VOICE_LEVEL_RATE_HZ: f64 = 6e3;

/// One user's modulator.
#[derive(Clone, Debug)]
pub(super) struct Source {
    rng: Xoshiro256PlusPlus,
    /// Amplitude while on, full scale = 1.
    amplitude: f32,
    /// Samples of the scene in one ramp.
    ramp_samples: f64,
    /// Whether levels are continuous, as in speech, or one of four symbols.
    voice: bool,
    /// Levels for one sample of the source.
    level_step: f64,
    /// The four levels that the spline now lies between (-1 to 1).
    levels: [f64; 4],
    /// Place between the inner two of them (0 to 1).
    place: f64,
    /// Peak deviation (turns a sample of the source).
    deviation: f64,
    /// Carrier frequency above the bin that the source is placed on (turns a sample).
    carrier: f64,
    /// Phase (turns).
    phase: f64,
}

impl Source {
    /// The source of a user. `remainder_hz` is its carrier frequency above the bin that the source
    /// will be placed on (Hz).
    pub(super) fn new(
        user: &User,
        remainder_hz: f64,
        sample_rate_hz: f64,
        rng: Xoshiro256PlusPlus,
    ) -> Source {
        let rate_hz = sample_rate_hz / DECIMATION as f64;
        let voice = user.kind.is_voice();
        let level_rate_hz = if voice { VOICE_LEVEL_RATE_HZ } else { user.bandwidth_hz / 4.0 };
        // Carson's rule, bandwidth = 2 (deviation + highest modulating frequency), with half the
        // level rate as the latter.
        let deviation_hz = (user.bandwidth_hz - level_rate_hz) / 2.0;
        assert!(deviation_hz >= 0.0, "bandwidth {} Hz is too narrow for voice", user.bandwidth_hz);
        let mut source = Source {
            rng,
            amplitude: 10f64.powf(user.level_dbfs / 20.0) as f32,
            ramp_samples: RAMP_S * sample_rate_hz,
            voice,
            level_step: level_rate_hz / rate_hz,
            levels: [0.0; 4],
            place: 0.0,
            deviation: deviation_hz / rate_hz,
            carrier: remainder_hz / rate_hz,
            phase: 0.0,
        };
        for index in 0..source.levels.len() {
            source.levels[index] = source.draw_level();
        }
        source.phase = StandardUniform.sample(&mut source.rng);
        source
    }

    /// Writes the part of one transmission that falls into `signal`, whose first sample is taken
    /// at `start_sample` of the scene; leaves the rest as it is.
    ///
    /// Must be called in the order of time, each stretch once: the modulation runs on.
    pub(super) fn transmit(
        &mut self,
        on: Transmission,
        start_sample: u64,
        signal: &mut [Complex32],
    ) {
        let index_of = |sample: u64| {
            let index = sample.saturating_sub(start_sample).div_ceil(DECIMATION as u64);
            usize::try_from(index).unwrap_or(usize::MAX).min(signal.len())
        };
        let (first, end) = (index_of(on.from_sample), index_of(on.to_sample));
        for (index, value) in signal[..end].iter_mut().enumerate().skip(first) {
            let sample = start_sample + (index * DECIMATION) as u64;
            let edge_distance = (sample - on.from_sample).min(on.to_sample - sample) as f64;
            *value = self.next() * self.key(edge_distance);
        }
    }

    /// Amplitude at a distance from the nearer end of the transmission (samples).
    fn key(&self, edge_distance: f64) -> f32 {
        if edge_distance >= self.ramp_samples {
            return self.amplitude;
        }
        let turn = std::f64::consts::PI * edge_distance / self.ramp_samples;
        self.amplitude * (0.5 - 0.5 * turn.cos()) as f32
    }

    /// The next sample of the modulated carrier, amplitude 1.
    fn next(&mut self) -> Complex32 {
        let turns = self.carrier + self.deviation * self.spline();
        self.phase += turns;
        self.phase -= self.phase.floor();
        self.place += self.level_step;
        if self.place >= 1.0 {
            self.place -= 1.0;
            self.levels.rotate_left(1);
            self.levels[3] = self.draw_level();
        }
        let (sine, cosine) = (std::f32::consts::TAU * self.phase as f32).sin_cos();
        Complex32::new(cosine, sine)
    }

    /// The uniform cubic B-spline at the present place (-1 to 1).
    fn spline(&self) -> f64 {
        let [a, b, c, d] = self.levels;
        let t = self.place;
        let u = 1.0 - t;
        let inner = |t: f64| (3.0 * t - 6.0) * t * t + 4.0;
        (a * u * u * u + b * inner(t) + c * inner(u) + d * t * t * t) / 6.0
    }

    /// The next random level: uniform for speech, one of four evenly spaced ones for symbols.
    fn draw_level(&mut self) -> f64 {
        let unit: f64 = StandardUniform.sample(&mut self.rng);
        if self.voice { 2.0 * unit - 1.0 } else { (4.0 * unit).floor() * (2.0 / 3.0) - 1.0 }
    }
}

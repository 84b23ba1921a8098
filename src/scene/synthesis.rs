//! From spec and seed to samples: noise and signals are laid out over the bins of a transform,
//! turned into time by one inverse transform, and cross-faded from block to block.
//!
//! The cross-fade is half of the block long, with the flanks sine and cosine:
//! - Noise is independent from block to block, so powers add: sin^2 + cos^2 = 1 keeps it even.
//! - A signal carries the same flanks before its own transform, so amplitudes add as sin^2 + cos^2
//!   too, and it runs on unbroken. Only the flanks' own spectrum is cut off at half the source's
//!   rate: that leaves products more than 90 dB below the signal one raster step (25 kHz) away.
//!
//! It must never draw a random number in an order that depends on how samples are fetched.

use std::f64::consts::FRAC_PI_2;
use std::sync::Arc;

use num_complex::Complex32;
use rand_distr::{Distribution, StandardNormal};
use rand_xoshiro::Xoshiro256PlusPlus;
use rustfft::{Fft, FftPlanner};

use super::source::{DECIMATION, RAMP_S, Source};
use super::spec::{Habit, RasterChannel, SceneSpec, User};
use super::truth::{Purpose, Truth, streams};

/// Transform length (samples).
const BLOCK: usize = 16_384;
/// Length of the cross-fade between consecutive blocks (samples).
const FADE: usize = BLOCK / 2;
/// New samples in each block.
pub(super) const HOP: usize = BLOCK - FADE;
/// The same three at the sources' rate.
const SOURCE_BLOCK: usize = BLOCK / DECIMATION;
const SOURCE_FADE: usize = FADE / DECIMATION;
const SOURCE_HOP: usize = HOP / DECIMATION;

/// An invented site, ready to be listened to.
pub struct Scene {
    spec: SceneSpec,
    truth: Truth,
    sources: Vec<PlacedSource>,
    noise: Noise,
    inverse: Arc<dyn Fft<f32>>,
    source_forward: Arc<dyn Fft<f32>>,
    /// Flanks at the scene's rate: the rising one; the falling one is its mirror image.
    rise: Vec<f32>,
    /// The same at the sources' rate.
    source_rise: Vec<f32>,
    /// Blocks made so far.
    blocks: u64,
    /// The block: finished samples up to `HOP`, then the falling flank for the next.
    block: Vec<Complex32>,
    /// The falling flank of the block before.
    tail: Vec<Complex32>,
    source_block: Vec<Complex32>,
    scratch: Vec<Complex32>,
    /// Index in `block` of the next sample to hand out.
    next: usize,
    position: u64,
}

/// A source and its place in the spectrum.
struct PlacedSource {
    source: Source,
    /// The bin that the source's zero frequency falls on, from the block's middle.
    bin: i64,
    /// The source's samples of the present block, its first `SOURCE_FADE` from the one before.
    signal: Vec<Complex32>,
    /// Whether the first part, or the second, holds anything but zeros.
    on: (bool, bool),
}

/// The noise floor.
struct Noise {
    rng: Xoshiro256PlusPlus,
    /// Standard deviation of the real and of the imaginary part in each bin, transform order.
    amplitude: Vec<f32>,
}

impl Scene {
    /// The scene of a spec, at its first sample.
    ///
    /// # Panics
    /// If the spec makes no sense: a user whose channel would not fit into the block or a source's
    /// band, or a transmission shorter than its key's ramps.
    pub fn new(spec: SceneSpec, seed: u64) -> Scene {
        let mut planner = FftPlanner::new();
        let inverse = planner.plan_fft_inverse(BLOCK);
        let source_forward = planner.plan_fft_forward(SOURCE_BLOCK);
        let scratch_length =
            inverse.get_inplace_scratch_len().max(source_forward.get_inplace_scratch_len());
        let sources = spec
            .users
            .iter()
            .zip(streams(seed, Purpose::Modulation))
            .map(|(user, rng)| PlacedSource::new(&spec, user, rng))
            .collect();
        let mut scene = Scene {
            truth: Truth::new(&spec, seed),
            sources,
            noise: Noise::new(&spec, seed),
            inverse,
            source_forward,
            rise: rising_flank(FADE),
            source_rise: rising_flank(SOURCE_FADE),
            blocks: 0,
            block: vec![Complex32::ZERO; BLOCK],
            tail: vec![Complex32::ZERO; FADE],
            source_block: vec![Complex32::ZERO; SOURCE_BLOCK],
            scratch: vec![Complex32::ZERO; scratch_length],
            next: FADE,
            position: 0,
            spec,
        };
        // The first block begins one cross-fade before the first sample: that part is passed over.
        scene.make_block();
        scene.next = FADE;
        scene
    }

    /// What the scene was made from.
    pub fn spec(&self) -> &SceneSpec {
        &self.spec
    }

    /// The channels, by rising frequency.
    pub fn raster(&self) -> &[RasterChannel] {
        &self.spec.channels
    }

    /// How many samples were handed out: the number of the next one.
    pub fn position(&self) -> u64 {
        self.position
    }

    /// Who was on, and when; asking reaches into the future too and changes no sample.
    pub fn truth(&mut self) -> &mut Truth {
        &mut self.truth
    }

    /// Share of the half-open range of samples for which a user is on: [`Truth::activity`].
    pub fn activity(&mut self, user_index: usize, from_sample: u64, to_sample: u64) -> f64 {
        self.truth.activity(user_index, from_sample, to_sample)
    }

    /// Fills `samples` with the next samples of the stream, full scale = 1.
    pub fn fill(&mut self, samples: &mut [Complex32]) {
        let mut filled = 0;
        while filled < samples.len() {
            if self.next == HOP {
                self.make_block();
            }
            let count = (HOP - self.next).min(samples.len() - filled);
            samples[filled..filled + count]
                .copy_from_slice(&self.block[self.next..self.next + count]);
            self.next += count;
            filled += count;
        }
        self.position += samples.len() as u64;
    }

    /// Makes the next block, which covers one cross-fade before its new samples and these.
    fn make_block(&mut self) {
        self.tail.copy_from_slice(&self.block[HOP..]);
        self.noise.fill(&mut self.block);
        let new_from = self.blocks * HOP as u64;
        for (user_index, placed) in self.sources.iter_mut().enumerate() {
            placed.advance(&mut self.truth, user_index, new_from);
            if placed.on.0 || placed.on.1 {
                self.source_block.copy_from_slice(&placed.signal);
                shape(&mut self.source_block, &self.source_rise);
                self.source_forward.process_with_scratch(&mut self.source_block, &mut self.scratch);
                placed.place(&self.source_block, self.blocks, &mut self.block);
            }
        }
        self.inverse.process_with_scratch(&mut self.block, &mut self.scratch);
        shape(&mut self.block, &self.rise);
        for (sample, before) in self.block.iter_mut().zip(&self.tail) {
            *sample += before;
        }
        self.blocks += 1;
        self.next = 0;
    }
}

impl PlacedSource {
    fn new(spec: &SceneSpec, user: &User, rng: Xoshiro256PlusPlus) -> PlacedSource {
        check(spec, user);
        let bin_hz = spec.sample_rate_hz / BLOCK as f64;
        let offset_hz = user.centre_hz - spec.centre_hz;
        let bin = (offset_hz / bin_hz).round();
        PlacedSource {
            source: Source::new(user, offset_hz - bin * bin_hz, spec.sample_rate_hz, rng),
            bin: bin as i64,
            signal: vec![Complex32::ZERO; SOURCE_BLOCK],
            on: (false, false),
        }
    }

    /// Moves on by one hop: makes the source's samples from `new_from` of the scene on.
    fn advance(&mut self, truth: &mut Truth, user_index: usize, new_from: u64) {
        if self.on.0 || self.on.1 {
            self.signal.copy_within(SOURCE_HOP.., 0);
            self.signal[SOURCE_FADE..].fill(Complex32::ZERO);
        }
        self.on = (self.on.1, false);
        for on in truth.transmissions(user_index, new_from, new_from + HOP as u64) {
            self.source.transmit(on, new_from, &mut self.signal[SOURCE_FADE..]);
            self.on.1 = true;
        }
    }

    /// Adds the source's spectrum to that of block number `block_index`.
    fn place(&self, source_spectrum: &[Complex32], block_index: u64, spectrum: &mut [Complex32]) {
        // The transform counts phase from the block's own start; the carrier counts from the
        // scene's. What the bin has turned in the hops before makes up the difference.
        let turned = (self.bin as i128 * block_index as i128 * HOP as i128)
            .rem_euclid(BLOCK as i128) as f64
            / BLOCK as f64;
        let angle = std::f64::consts::TAU * turned;
        let factor = Complex32::new(angle.cos() as f32, angle.sin() as f32) / SOURCE_BLOCK as f32;
        let half = SOURCE_BLOCK / 2;
        let lowest = (self.bin - half as i64).rem_euclid(BLOCK as i64) as usize;
        let negative_first = source_spectrum[half..].iter().chain(&source_spectrum[..half]);
        for (index, value) in negative_first.enumerate() {
            spectrum[(lowest + index) % BLOCK] += value * factor;
        }
    }
}

impl Noise {
    fn new(spec: &SceneSpec, seed: u64) -> Noise {
        let bin_hz = spec.sample_rate_hz / BLOCK as f64;
        let amplitude = (0..BLOCK)
            .map(|index| {
                let bin =
                    if index < BLOCK / 2 { index as f64 } else { index as f64 - BLOCK as f64 };
                let power_dbfs = spec.floor_dbfs_in(spec.centre_hz + bin * bin_hz, bin_hz);
                (10f64.powf(power_dbfs / 10.0) / 2.0).sqrt() as f32
            })
            .collect();
        let rng = streams(seed, Purpose::Noise).next().expect("streams never end");
        Noise { rng, amplitude }
    }

    /// Fills a spectrum with independent complex Gaussian bins.
    fn fill(&mut self, spectrum: &mut [Complex32]) {
        for (value, amplitude) in spectrum.iter_mut().zip(&self.amplitude) {
            let real: f32 = StandardNormal.sample(&mut self.rng);
            let imaginary: f32 = StandardNormal.sample(&mut self.rng);
            *value = Complex32::new(real * amplitude, imaginary * amplitude);
        }
    }
}

/// Asserts that a user can be synthesised.
fn check(spec: &SceneSpec, user: &User) {
    let edge_hz = (user.centre_hz - spec.centre_hz).abs() + user.bandwidth_hz / 2.0;
    assert!(edge_hz <= spec.sample_rate_hz / 2.0, "user on {} Hz is outside", user.centre_hz);
    let source_rate_hz = spec.sample_rate_hz / DECIMATION as f64;
    assert!(
        user.bandwidth_hz <= 0.35 * source_rate_hz,
        "bandwidth {} Hz is too wide for a source at {source_rate_hz} Hz",
        user.bandwidth_hz
    );
    let shortest_s = match user.habit {
        Habit::Always => f64::INFINITY,
        Habit::Exchanges { calls, call_s, call_shortest_s, .. } => {
            assert!(calls >= 1.0 && call_s >= call_shortest_s, "{:?}", user.habit);
            call_shortest_s
        }
        Habit::Bursts { period_s, jitter_s, shortest_s, longest_s } => {
            assert!(longest_s >= shortest_s, "{:?}", user.habit);
            assert!(2.0 * jitter_s + longest_s < period_s, "{:?}", user.habit);
            shortest_s
        }
    };
    assert!(shortest_s >= 4.0 * RAMP_S, "transmissions of {shortest_s} s are too short");
}

/// The rising flank of a cross-fade: a quarter of a sine, powers add to 1 with its mirror image.
fn rising_flank(length: usize) -> Vec<f32> {
    (0..length).map(|n| (FRAC_PI_2 * n as f64 / length as f64).sin() as f32).collect()
}

/// Multiplies both ends of a block with the flanks.
fn shape(block: &mut [Complex32], rise: &[f32]) {
    let fall_from = block.len() - rise.len();
    let (body, end) = block.split_at_mut(fall_from);
    for (sample, flank) in body.iter_mut().zip(rise) {
        *sample *= flank;
    }
    // cos at n is sin at `length - n`; at n = 0 it is 1, which the rising flank does not hold.
    for (sample, flank) in end.iter_mut().skip(1).zip(rise.iter().rev()) {
        *sample *= flank;
    }
}

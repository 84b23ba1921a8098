//! Trials of the node's own detector on samples whose truth is known.
//!
//! A batch is an unbroken run of samples through a detector of its own: white noise, and in each
//! step (the longest dwell of the plan) signals on channels drawn at random, never on the same one
//! twice in a row. Everything is drawn from the seed and the number of the batch, so batches can be
//! made in any order, and on any number of threads, with the same counts.

use std::sync::Arc;

use num_complex::Complex32;
use rand_core::SeedableRng;
use rand_distr::{Distribution, StandardNormal, StandardUniform};
use rand_xoshiro::Xoshiro256PlusPlus;
use rustfft::{Fft, FftPlanner};
use sha2::{Digest, Sha256};

use super::format::NumberFormat;
use crate::detection::block::SampleBlock;
use crate::detection::detector::Detector;
use crate::detection::plan::Plan;
use crate::detection::time::{NANOS_PER_SECOND, Stamp, Utc};
use crate::detection::timing::Timing;
use crate::detection::verdict::{DwellReport, Reason, Reasons, State, Verdict};

/// Most samples in a step: what a thread holds is a few times this.
pub const STEP_SAMPLES_MAX: usize = 1 << 24;

/// The kinds of signal that are tried.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// Complex Gaussian, filling the channel from edge to edge.
    NoiseLike,
    /// A carrier at a random frequency in the middle half of the channel.
    Carrier,
}

/// What is sent in a trial.
#[derive(Clone, Debug)]
pub struct Signals {
    /// Kind of signal.
    pub kind: Kind,
    /// Share of the channels that have one at a time (0 to 0.5).
    pub share: f64,
    /// Power by channel (linear, full scale = 1); a channel with `None` is never drawn.
    pub powers: Vec<Option<f64>>,
}

/// A kind of trial.
#[derive(Clone, Debug)]
pub struct Trial {
    /// What the detector watches.
    pub plan: Plan,
    /// Number format that all samples go through.
    pub format: NumberFormat,
    /// Noise power over the whole sample rate (linear, full scale = 1).
    pub noise_power: f64,
    /// Signals; `None` for noise alone.
    pub signals: Option<Signals>,
    /// Seed; trials of another `number` under the same seed are independent.
    pub seed: u64,
    /// Number of the trial.
    pub number: u64,
}

/// Decisions of one step on channels in the same condition.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Count {
    /// Decisions.
    pub decided: u64,
    /// Those that said `occupied`.
    pub detected: u64,
    /// Verdicts that could not decide, for a reason other than a floor that hides the protection
    /// level.
    pub undecided: u64,
}

/// What a step has shown, by band of the plan.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Step {
    /// Channels without a signal in this step and its neighbours.
    pub idle: Vec<Count>,
    /// Channels with one.
    pub occupied: Vec<Count>,
}

/// Samples in a step: the longest dwell of the plan.
pub fn step_samples(plan: &Plan) -> usize {
    let dwells = plan.bands.iter().map(|band| Timing::new(plan, band).dwell_samples());
    dwells.max().expect("a plan has bands")
}

/// Steps in a whole batch: some millions of samples, so that making the detector costs little
/// beside them, and few enough to keep several threads busy.
pub fn batch_steps(plan: &Plan) -> u64 {
    ((1 << 23) / step_samples(plan)).clamp(16, 256) as u64
}

/// Runs one batch of `steps` steps; `sink` gets every report of a whole dwell.
pub fn run_batch(
    trial: &Trial,
    batch: u64,
    steps: u64,
    mut sink: impl FnMut(&DwellReport),
) -> Vec<Step> {
    let plan = &trial.plan;
    let mut detector = Detector::new(plan);
    let mut stream = Stream::new(trial, batch);
    let mut on: Vec<Vec<bool>> = Vec::new();
    let mut reports = Vec::new();
    let start = Stamp { utc: Utc(0), monotonic_ns: 0 };
    for step in 0..=steps {
        let mut samples = Vec::new();
        // The last step ends with the transforms that begin in it.
        if step < steps {
            on.push(stream.step(&mut samples));
        } else {
            stream.end(&mut samples);
        }
        let clipped = trial.format.apply(&mut samples);
        let block = SampleBlock { samples, start, gap_before: step == 0, clipped };
        detector.push(&block, |report| reports.push(report));
    }
    let bands = plan.bands.len();
    let mut counts =
        vec![
            Step { idle: vec![Count::default(); bands], occupied: vec![Count::default(); bands] };
            steps as usize
        ];
    for report in &reports {
        if let Some(step) = whole_dwell_step(plan, report, steps) {
            sink(report);
            count(plan, report, &on, step, &mut counts[step]);
        }
    }
    counts
}

/// The step in which a report's dwell lies; `None` for one that is cut short or lies across two.
fn whole_dwell_step(plan: &Plan, report: &DwellReport, steps: u64) -> Option<usize> {
    let first = report.verdicts.first()?;
    let rate_hz = plan.receiver.sample_rate_hz;
    let timing = Timing::new(plan, plan.band_of(&plan.channels[first.channel_index]));
    if (report.observed_ns - timing.dwell_ns(rate_hz)).abs() > 1 {
        return None;
    }
    let seconds = report.start.monotonic_ns as f64 / NANOS_PER_SECOND as f64;
    let from = (seconds * rate_hz).round() as usize;
    let step_samples = step_samples(plan);
    let step = from / step_samples;
    let inside = from + timing.dwell_samples() <= (step + 1) * step_samples;
    (inside && step < steps as usize).then_some(step)
}

fn count(plan: &Plan, report: &DwellReport, on: &[Vec<bool>], step: usize, counts: &mut Step) {
    for verdict in &report.verdicts {
        let channel = verdict.channel_index;
        let neighbours = step.saturating_sub(1)..(step + 2).min(on.len());
        let counts = if on[step][channel] {
            &mut counts.occupied
        } else if on[neighbours].iter().any(|on| on[channel]) {
            // The flank of a neighbouring step's signal reaches into this one.
            continue;
        } else {
            &mut counts.idle
        };
        let count = &mut counts[plan.channels[channel].band_index];
        if decides(verdict) {
            count.decided += 1;
            count.detected += u64::from(verdict.state == State::Occupied);
        } else {
            count.undecided += 1;
        }
    }
}

/// Whether energy was held against a threshold. `insensitive` says what its absence is worth.
fn decides(verdict: &Verdict) -> bool {
    verdict.state != State::Unknown || verdict.reasons == Reasons::one(Reason::Insensitive)
}

/// The samples of a batch. Signals have flanks of one transform before and after the samples that
/// the step's transforms see, so that no cut edge spreads over the block.
struct Stream<'a> {
    trial: &'a Trial,
    rng: Xoshiro256PlusPlus,
    step_samples: usize,
    flank: usize,
    transform: Arc<dyn Fft<f32>>,
    /// Signals from one flank before the current step on.
    canvas: Vec<Complex32>,
    before: Vec<bool>,
    begun: bool,
}

impl<'a> Stream<'a> {
    fn new(trial: &'a Trial, batch: u64) -> Stream<'a> {
        let plan = &trial.plan;
        let mut digest = Sha256::new();
        for part in [trial.seed, trial.number, batch] {
            digest.update(part.to_le_bytes());
        }
        let step_samples = step_samples(plan);
        let flank = plan.spectrum.transform_length;
        let length = smooth_from(step_samples + 3 * flank);
        Stream {
            trial,
            rng: Xoshiro256PlusPlus::from_seed(digest.finalize().into()),
            step_samples,
            flank,
            transform: FftPlanner::new().plan_fft_inverse(length),
            canvas: vec![Complex32::ZERO; step_samples + 3 * flank],
            before: vec![false; plan.channels.len()],
            begun: false,
        }
    }

    fn normal(&mut self) -> f32 {
        StandardNormal.sample(&mut self.rng)
    }

    fn uniform(&mut self) -> f64 {
        StandardUniform.sample(&mut self.rng)
    }

    /// Appends the samples up to one flank before the end of a new step; tells the channels that
    /// are on in it.
    fn step(&mut self, samples: &mut Vec<Complex32>) -> Vec<bool> {
        let on = self.draw();
        self.add_signals(&on);
        let from = if self.begun { 0 } else { self.flank };
        self.begun = true;
        samples.extend_from_slice(&self.canvas[from..self.step_samples]);
        self.canvas.drain(..self.step_samples);
        self.canvas.resize(self.step_samples + 3 * self.flank, Complex32::ZERO);
        self.add_noise(samples);
        self.before.clone_from(&on);
        on
    }

    /// Appends what the transforms that begin in the last step still need.
    fn end(&mut self, samples: &mut Vec<Complex32>) {
        samples.extend_from_slice(&self.canvas[..2 * self.flank]);
        self.add_noise(samples);
    }

    fn add_noise(&mut self, samples: &mut [Complex32]) {
        let amplitude = (self.trial.noise_power / 2.0).sqrt() as f32;
        for sample in samples {
            *sample += Complex32::new(self.normal(), self.normal()) * amplitude;
        }
    }

    /// Draws the channels of a step: a share of all, at least one, none that was on before.
    fn draw(&mut self) -> Vec<bool> {
        let mut on = vec![false; self.before.len()];
        let trial = self.trial;
        let Some(signals) = &trial.signals else { return on };
        let candidate = |channel: &usize| signals.powers[*channel].is_some();
        let mut free: Vec<usize> =
            (0..on.len()).filter(candidate).filter(|channel| !self.before[*channel]).collect();
        let wanted = (signals.share * on.len() as f64).round().max(1.0) as usize;
        for _ in 0..wanted.min(free.len()) {
            let place = (self.uniform() * free.len() as f64) as usize;
            on[free.swap_remove(place)] = true;
        }
        on
    }

    fn add_signals(&mut self, on: &[bool]) {
        let trial = self.trial;
        let Some(signals) = &trial.signals else { return };
        let plan = &trial.plan;
        let length = self.transform.len();
        let bin_hz = plan.receiver.sample_rate_hz / length as f64;
        let bin = |hz: f64| ((hz - plan.receiver.centre_hz) / bin_hz).round() as i64;
        let mut spectrum = vec![Complex32::ZERO; length];
        for (index, channel) in plan.channels.iter().enumerate().filter(|(index, _)| on[*index]) {
            let power = signals.powers[index].expect("only channels with a power are drawn");
            match signals.kind {
                Kind::NoiseLike => {
                    let (low_hz, high_hz) = channel.edges_hz();
                    let bins = bin(low_hz)..bin(high_hz).max(bin(low_hz) + 1);
                    let amplitude = (0.5 * power / (bins.end - bins.start) as f64).sqrt() as f32;
                    for k in bins {
                        spectrum[k.rem_euclid(length as i64) as usize] =
                            Complex32::new(self.normal(), self.normal()) * amplitude;
                    }
                }
                Kind::Carrier => {
                    let offset_hz = 0.5 * (self.uniform() - 0.5) * channel.bandwidth_hz;
                    let k = bin(channel.centre_hz + offset_hz).rem_euclid(length as i64);
                    let phase = std::f32::consts::TAU * self.uniform() as f32;
                    spectrum[k as usize] = Complex32::from_polar(power.sqrt() as f32, phase);
                }
            }
        }
        self.transform.process(&mut spectrum);
        let (flank, end) = (self.flank, self.canvas.len());
        for (n, (sum, value)) in self.canvas.iter_mut().zip(&spectrum).enumerate() {
            let from_edge = n.min(end - 1 - n);
            let rise = match from_edge < flank {
                true => {
                    let angle =
                        std::f32::consts::FRAC_PI_2 * (from_edge as f32 + 0.5) / flank as f32;
                    angle.sin().powi(2)
                }
                false => 1.0,
            };
            *sum += value * rise;
        }
    }
}

/// The smallest length from `least` on whose only prime factors are 2, 3 and 5: quick to transform.
fn smooth_from(least: usize) -> usize {
    (least..)
        .find(|length| {
            let mut rest = *length;
            for factor in [2, 3, 5] {
                while rest % factor == 0 {
                    rest /= factor;
                }
            }
            rest == 1
        })
        .expect("there are arbitrarily large ones")
}

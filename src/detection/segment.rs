//! The detector of one segment: the channels of the block whose bands share a dwell length.
//!
//! Samples stream through: transforms are taken as soon as their samples are there, slices and
//! dwells are sums. Nothing of the samples is kept but what the next transform overlaps.

use num_complex::Complex32;

use super::block::SampleBlock;
use super::decision::{Decision, Evidence, Scratch};
use super::layout::Layout;
use super::memory::FloorMemory;
use super::plan::Plan;
use super::spectrum::{Spectrum, to_rising_frequency};
use super::statistics::weights::Weights;
use super::time::{Stamp, samples_to_nanos};
use super::timing::Timing;
use super::verdict::{DwellReport, Reason, Reasons};

/// A dwell with a larger share of samples at the converter's limits supports no claim: clipping
/// spreads a strong signal over the whole block. At 12 dB of headroom noise reaches the limits in
/// fewer than 1e-6 of samples.
pub const CLIPPED_SHARE_MAX: f64 = 1e-5;

/// Detector of one segment.
pub struct SegmentDetector {
    layout: Layout,
    timing: Timing,
    sample_rate_hz: f64,
    spectrum: Spectrum,
    weights: Weights,
    plan: Plan,
    /// Decisions by number of slices, made when first needed; index 0 stays empty.
    decisions: Vec<Option<Box<Decision>>>,
    scratch: Scratch,
    memory: FloorMemory,
    /// Samples that the next transform needs.
    pending: Vec<Complex32>,
    /// When sample 0 since the last gap was taken.
    anchor: Stamp,
    /// Samples from there to the start of the dwell in progress.
    dwell_start: u64,
    dwell: DwellInProgress,
}

/// Sums of the dwell that is being filled.
#[derive(Default)]
struct DwellInProgress {
    transforms_in_slice: usize,
    slices: usize,
    clipped: usize,
    silent: bool,
    /// Sum over the slice's transforms, DC first.
    slice_power: Vec<f32>,
    /// The slice's mean, by rising frequency.
    slice_spectrum: Vec<f32>,
    /// Sum of the slices' means.
    power: Vec<f64>,
    /// Mean power per bin of every reference cell, slice after slice.
    slice_cells: Vec<f32>,
}

impl DwellInProgress {
    fn reset(&mut self) {
        self.transforms_in_slice = 0;
        self.slices = 0;
        self.clipped = 0;
        self.silent = false;
        self.slice_power.fill(0.0);
        self.power.fill(0.0);
        self.slice_cells.clear();
    }
}

impl SegmentDetector {
    /// For the plan's channels with the given indices, whose bands ask for the same dwell and
    /// slice.
    ///
    /// # Panics
    /// If there is no channel, or the plan is not a checked one.
    pub fn new(plan: &Plan, channel_indices: &[usize]) -> SegmentDetector {
        let first = &plan.channels[*channel_indices.first().expect("a segment has channels")];
        let timing = Timing::new(plan, plan.band_of(first));
        let length = plan.spectrum.transform_length;
        let window = plan.spectrum.window;
        let mut detector = SegmentDetector {
            layout: Layout::new(plan, channel_indices),
            timing,
            sample_rate_hz: plan.receiver.sample_rate_hz,
            spectrum: Spectrum::new(window, length),
            weights: Weights::new(&window.values(length), timing.hop),
            plan: plan.clone(),
            decisions: vec![None; timing.slices + 1],
            scratch: Scratch::default(),
            memory: FloorMemory::default(),
            pending: Vec::new(),
            anchor: Stamp { utc: super::time::Utc(0), monotonic_ns: 0 },
            dwell_start: 0,
            dwell: DwellInProgress {
                slice_power: vec![0.0; length],
                slice_spectrum: vec![0.0; length],
                power: vec![0.0; length],
                ..DwellInProgress::default()
            },
        };
        detector.decision(timing.slices);
        detector
    }

    /// How its dwells are cut.
    pub fn timing(&self) -> Timing {
        self.timing
    }

    /// Which bins belong to which channel.
    pub fn layout(&self) -> &Layout {
        &self.layout
    }

    /// The decision for a dwell of `slices` slices.
    pub fn decision(&mut self, slices: usize) -> &Decision {
        let transforms = self.timing.transforms_per_slice;
        let (plan, layout, weights) = (&self.plan, &self.layout, &mut self.weights);
        let make = || Box::new(Decision::new(plan, layout, weights, transforms, slices));
        self.decisions[slices].get_or_insert_with(make)
    }

    /// Takes in a block and hands every dwell that it completes to `sink`. A gap ends the dwell in
    /// progress: its whole slices make a shorter dwell, with the threshold and sensitivity of that.
    pub fn push(&mut self, block: &SampleBlock, sink: &mut impl FnMut(DwellReport)) {
        if block.gap_before {
            self.finish(sink);
            self.anchor = block.start;
            self.dwell_start = 0;
        }
        self.pending.extend_from_slice(&block.samples);
        self.dwell.clipped += block.clipped;
        let length = self.spectrum.length();
        let mut from = 0;
        while self.pending.len() - from >= length {
            let samples = &self.pending[from..from + length];
            // A receiver that listens delivers noise. The first sample that is not zero ends the
            // look.
            self.dwell.silent |= samples.iter().all(|sample| *sample == Complex32::ZERO);
            self.spectrum.accumulate(samples, &mut self.dwell.slice_power);
            from += self.timing.hop;
            self.dwell.transforms_in_slice += 1;
            if self.dwell.transforms_in_slice == self.timing.transforms_per_slice {
                self.end_slice();
            }
            if self.dwell.slices == self.timing.slices {
                sink(self.end_dwell());
                // What clipped in this block may belong to either side of the border.
                self.dwell.clipped = block.clipped;
            }
        }
        self.pending.drain(..from);
    }

    /// Ends the run of samples: whole slices so far make a shorter dwell, the rest is dropped.
    pub fn finish(&mut self, sink: &mut impl FnMut(DwellReport)) {
        if self.dwell.slices > 0 {
            sink(self.end_dwell());
        }
        self.dwell.reset();
        self.pending.clear();
    }

    fn end_slice(&mut self) {
        let dwell = &mut self.dwell;
        let scale = 1.0 / self.timing.transforms_per_slice as f32;
        to_rising_frequency(&dwell.slice_power, scale, &mut dwell.slice_spectrum);
        for (sum, power) in dwell.power.iter_mut().zip(&dwell.slice_spectrum) {
            *sum += f64::from(*power);
        }
        let cells = self.layout.references.iter();
        let spectrum = &dwell.slice_spectrum;
        dwell.slice_cells.extend(cells.map(|cell| cell.span.mean_power(spectrum) as f32));
        dwell.slice_power.fill(0.0);
        dwell.transforms_in_slice = 0;
        dwell.slices += 1;
    }

    fn end_dwell(&mut self) -> DwellReport {
        let slices = self.dwell.slices;
        let samples = slices * self.timing.slice_samples();
        let spectrum: Vec<f32> =
            self.dwell.power.iter().map(|power| (power / slices as f64) as f32).collect();
        let mut reasons = Reasons::NONE;
        if self.dwell.clipped as f64 > CLIPPED_SHARE_MAX * samples as f64 {
            reasons.insert(Reason::Overload);
        }
        if self.dwell.silent {
            reasons.insert(Reason::NoNoise);
        }
        let nanos = |samples| samples_to_nanos(samples, self.sample_rate_hz);
        let begun = self.dwell_start;
        self.dwell_start += samples as u64;
        let observed_ns = nanos(self.dwell_start) - nanos(begun);
        let start = self.anchor.plus_nanos(nanos(begun));
        let slice_power_db = self.slice_power_db();
        let mut verdicts = Vec::with_capacity(self.layout.channels.len());
        self.decision(slices);
        let decision = self.decisions[slices].as_ref().expect("made just now");
        let evidence =
            Evidence { spectrum: &spectrum, slices: &self.dwell.slice_cells, reasons, observed_ns };
        let (memory, scratch) = (&mut self.memory, &mut self.scratch);
        decision.decide(&self.layout, evidence, memory, scratch, &mut verdicts);
        self.dwell.reset();
        DwellReport { sequence: 0, start, observed_ns, verdicts, slice_power_db, spectrum }
    }

    /// Power in each channel's bandwidth, slice after slice (dB).
    fn slice_power_db(&self) -> Vec<f32> {
        let slices = self.dwell.slice_cells.chunks_exact(self.layout.references.len());
        let channels = &self.layout.channels;
        slices
            .flat_map(|cells| {
                channels.iter().map(|channel| {
                    let power = f64::from(cells[channel.own_reference]) * channel.bandwidth_bins;
                    10.0 * power.log10() as f32
                })
            })
            .collect()
    }
}

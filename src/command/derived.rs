//! The numbers that follow from a configuration: what its decisions are worth, what it costs.

use serde::Serialize;

use crate::config::idle_offer_share;
use crate::daemon::{QUEUE_BLOCKS, block_samples};
use crate::detection::decision::{Evidence, Scratch};
use crate::detection::detector::Detector;
use crate::detection::memory::FloorMemory;
use crate::detection::plan::{Band, Plan};
use crate::detection::segment::SegmentDetector;
use crate::detection::verdict::{Levels, Reasons};
use crate::history::{Options, QUARTER_ROW_BYTES, RUN_ROW_BYTES, quarters_per_day};

/// Transmissions an hour that a channel is taken to hold where growth is estimated: common practice
/// has no figure, so the estimate names it.
pub(super) const TRANSMISSIONS_PER_HOUR: f64 = 20.0;

/// What follows from the configuration as a whole.
#[derive(Serialize)]
pub(super) struct Derived {
    pub(super) centre_hz: f64,
    pub(super) sample_rate_hz: f64,
    pub(super) usable_bandwidth_hz: f64,
    pub(super) window: &'static str,
    pub(super) transform_length: usize,
    pub(super) bin_width_hz: f64,
    pub(super) level_ref: &'static str,
    pub(super) bands: Vec<BandNumbers>,
    /// Sample buffers, sums and the history's queue when it is full (bytes).
    pub(super) buffers_bytes: f64,
    /// Quarter-hour rollups (bytes a day).
    pub(super) rollups_bytes_per_day: f64,
    /// Runs (bytes a day), at [`TRANSMISSIONS_PER_HOUR`] on every channel and the false detections.
    pub(super) runs_bytes_per_day: f64,
}

/// What follows for one band. What differs from channel to channel is that of its least sensitive
/// one.
#[derive(Serialize)]
pub(super) struct BandNumbers {
    pub(super) id: String,
    pub(super) channels: usize,
    pub(super) least_sensitive_channel: String,
    pub(super) bins_per_channel: usize,
    pub(super) dwell_s: f64,
    pub(super) slice_s: f64,
    pub(super) slices_per_dwell: usize,
    pub(super) overlap: f64,
    pub(super) transforms_per_dwell: usize,
    /// Independent looks that they are worth in the channel.
    pub(super) equivalent_looks: f64,
    pub(super) reference_cells: usize,
    pub(super) pfa: f64,
    pub(super) pd: f64,
    /// Over the floor (dB); `None` where even an idle block does not tell the floor.
    pub(super) threshold_over_floor_db: Option<f64>,
    /// Signal alone over the floor (dB).
    pub(super) sensitivity_over_floor_db: Option<f64>,
    /// Over the floor: where a single slice decides, on its share of the false-alarm probability
    /// (dB); `None` for dwells of a single slice.
    pub(super) burst_threshold_over_floor_db: Option<f64>,
    pub(super) protection_level_db: f64,
    /// The highest floor in a channel at which the protection level is still detected (dB).
    pub(super) floor_max_db: Option<f64>,
    pub(super) false_detections_per_channel_hour: f64,
    pub(super) false_detections_per_hour: f64,
    /// Share of time for which a truly idle channel is on offer.
    pub(super) idle_offer_share: f64,
}

impl Derived {
    /// Works the numbers out for a plan.
    pub(super) fn new(plan: &Plan) -> Derived {
        let mut detector = Detector::new(plan);
        let mut bands = Vec::new();
        for (index, band) in plan.bands.iter().enumerate() {
            let numbers = detector
                .segments()
                .iter_mut()
                .find_map(|segment| band_numbers(plan, index, band, segment));
            bands.push(numbers.expect("every band has channels"));
        }
        let false_per_hour: f64 = bands.iter().map(|band| band.false_detections_per_hour).sum();
        let channels = plan.channels.len() as f64;
        // Each transmission or false detection ends one run and begins another.
        let runs_per_hour = 2.0 * (TRANSMISSIONS_PER_HOUR * channels + false_per_hour);
        Derived {
            centre_hz: plan.receiver.centre_hz,
            sample_rate_hz: plan.receiver.sample_rate_hz,
            usable_bandwidth_hz: plan.receiver.usable_bandwidth_hz,
            window: plan.spectrum.window.as_str(),
            transform_length: plan.spectrum.transform_length,
            bin_width_hz: plan.receiver.sample_rate_hz / plan.spectrum.transform_length as f64,
            level_ref: plan.level_ref.as_str(),
            buffers_bytes: buffers_bytes(plan, &bands),
            rollups_bytes_per_day: channels * quarters_per_day() * QUARTER_ROW_BYTES,
            runs_bytes_per_day: 24.0 * runs_per_hour * RUN_ROW_BYTES,
            bands,
        }
    }
}

/// The numbers of a band; `None` when the segment holds another's channels.
fn band_numbers(
    plan: &Plan,
    band_index: usize,
    band: &Band,
    segment: &mut SegmentDetector,
) -> Option<BandNumbers> {
    let idle = idle_dwell(plan, segment);
    let sensitivity_db = |place: usize| idle[place].map_or(f64::INFINITY, |l| l.sensitivity_db);
    let in_band = |place: &usize| {
        plan.channels[segment.layout().channels[*place].channel_index].band_index == band_index
    };
    let place = (0..idle.len())
        .filter(in_band)
        .max_by(|a, b| sensitivity_db(*a).total_cmp(&sensitivity_db(*b)))?;
    let timing = segment.timing();
    let decision = segment.decision(timing.slices);
    let looks = decision.looks(place);
    let all_others = decision.reference_looks() - looks;
    let burst_threshold =
        (all_others > 0.0).then(|| decision.burst_threshold(place, all_others)).flatten();
    let over_floor_db = |level: fn(Levels) -> f64| idle[place].map(|l| level(l) - l.floor_db);
    let sensitivity_over_floor_db = over_floor_db(|levels| levels.sensitivity_db);
    let rate_hz = plan.receiver.sample_rate_hz;
    let dwell_s = timing.dwell_samples() as f64 / rate_hz;
    let channels = plan.channels.iter().filter(|c| c.band_index == band_index).count();
    let false_per_channel_hour = band.pfa * 3600.0 / dwell_s;
    let layout = segment.layout();
    let channel = &layout.channels[place];
    Some(BandNumbers {
        id: band.id.clone(),
        channels,
        least_sensitive_channel: plan.channels[channel.channel_index].id.clone(),
        bins_per_channel: channel.span.bins(),
        dwell_s,
        slice_s: timing.slice_samples() as f64 / rate_hz,
        slices_per_dwell: timing.slices,
        overlap: 1.0 - timing.hop as f64 / plan.spectrum.transform_length as f64,
        transforms_per_dwell: timing.slices * timing.transforms_per_slice,
        equivalent_looks: looks,
        reference_cells: layout.references.len(),
        pfa: band.pfa,
        pd: band.pd,
        threshold_over_floor_db: over_floor_db(|levels| levels.threshold_db),
        burst_threshold_over_floor_db: burst_threshold.map(|ratio| 10.0 * ratio.log10()),
        sensitivity_over_floor_db,
        protection_level_db: band.protection_level_db,
        floor_max_db: sensitivity_over_floor_db.map(|db| band.protection_level_db - db),
        false_detections_per_channel_hour: false_per_channel_hour,
        false_detections_per_hour: false_per_channel_hour * channels as f64,
        idle_offer_share: idle_offer_share(band),
    })
}

/// The levels of each of the segment's channels in a dwell without any signal. Thresholds relative
/// to the floor are then those of every idle dwell: the decision itself is asked.
fn idle_dwell(plan: &Plan, segment: &mut SegmentDetector) -> Vec<Option<Levels>> {
    let slices = segment.timing().slices;
    let spectrum = vec![1.0; plan.spectrum.transform_length];
    let layout = segment.layout().clone();
    let mut verdicts = Vec::new();
    let mut scratch = Scratch::default();
    let decision = segment.decision(slices);
    let evidence =
        Evidence { spectrum: &spectrum, slices: &[], reasons: Reasons::NONE, observed_ns: 0 };
    let mut memory = FloorMemory::default();
    decision.decide(&layout, evidence, &mut memory, &mut scratch, &mut verdicts);
    verdicts.into_iter().map(|verdict| verdict.levels).collect()
}

/// What the queues and sums hold when they are full.
fn buffers_bytes(plan: &Plan, bands: &[BandNumbers]) -> f64 {
    const SAMPLE: f64 = 8.0;
    const VERDICT: f64 = size_of::<crate::detection::verdict::Verdict>() as f64;
    let blocks = (QUEUE_BLOCKS + 2) * block_samples(plan.receiver.sample_rate_hz);
    let bins = plan.spectrum.transform_length as f64;
    // Per segment: window, transform, scratch, slice and dwell sums, pending samples.
    let sums = bands.len() as f64 * bins * (4.0 + 3.0 * SAMPLE + 4.0 + 4.0 + 8.0 + 2.0 * SAMPLE);
    let slices = bands.iter().map(|band| band.slices_per_dwell).max().unwrap_or(1) as f64;
    let report = 4.0 * bins + plan.channels.len() as f64 * (VERDICT + 4.0 * slices);
    blocks as f64 * SAMPLE + sums + report * Options::default().queue_depth as f64
}

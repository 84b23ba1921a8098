//! How a dwell is cut: transforms into slices, slices into a dwell, all in whole samples.

use super::plan::{Band, Plan};
use super::time::samples_to_nanos;

/// Transforms are never closer than this share of their length, whatever slice is asked for: closer
/// ones cost time and add nothing.
const HOP_SHARE_MIN: usize = 16;

/// The cut that comes nearest to what was asked for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Timing {
    /// Distance between transforms (samples); the overlap is at least the one asked for.
    pub hop: usize,
    /// Transforms in one slice.
    pub transforms_per_slice: usize,
    /// Slices in one dwell.
    pub slices: usize,
}

impl Timing {
    /// For a band of the plan.
    pub fn new(plan: &Plan, band: &Band) -> Timing {
        let length = plan.spectrum.transform_length;
        let hop_max = ((length as f64 * (1.0 - plan.spectrum.overlap)) as usize).max(1);
        let slice_samples = band.slice_s * plan.receiver.sample_rate_hz;
        let transforms_per_slice = (slice_samples / hop_max as f64).ceil().max(1.0);
        let hop_min = (length / HOP_SHARE_MIN).max(1).min(hop_max);
        let hop = ((slice_samples / transforms_per_slice) as usize).clamp(hop_min, hop_max);
        let slice = hop as f64 * transforms_per_slice;
        let slices = (band.dwell_s * plan.receiver.sample_rate_hz / slice).round().max(1.0);
        Timing { hop, transforms_per_slice: transforms_per_slice as usize, slices: slices as usize }
    }

    /// Length of a slice (samples).
    pub fn slice_samples(&self) -> usize {
        self.hop * self.transforms_per_slice
    }

    /// Length of a dwell (samples).
    pub fn dwell_samples(&self) -> usize {
        self.slice_samples() * self.slices
    }

    /// Length of a dwell (ns).
    pub fn dwell_ns(&self, sample_rate_hz: f64) -> i64 {
        samples_to_nanos(self.dwell_samples() as u64, sample_rate_hz)
    }
}

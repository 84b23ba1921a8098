//! Samples on their way in: a run of consecutive samples and what capture knows of them.

use num_complex::Complex32;

use super::time::Stamp;

/// A run of consecutive complex samples. Passive data: filled by a source, read by the detector.
#[derive(Clone, Debug)]
pub struct SampleBlock {
    /// Samples, full scale = 1 (a complex tone of amplitude 1 is 0 dBFS).
    pub samples: Vec<Complex32>,
    /// When the first of them was taken.
    pub start: Stamp,
    /// Whether samples are missing, or may be, between the previous block and this one. The first
    /// block of a run has it set.
    pub gap_before: bool,
    /// How many of the samples stood at the converter's limits.
    pub clipped: usize,
}

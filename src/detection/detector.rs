//! The detector of a whole plan: sample blocks in, dwell reports out.

use super::block::SampleBlock;
use super::plan::Plan;
use super::segment::SegmentDetector;
use super::verdict::DwellReport;

/// Detector of a plan: one [`SegmentDetector`] for each dwell length that its bands ask for.
pub struct Detector {
    segments: Vec<SegmentDetector>,
    sequence: u64,
}

impl Detector {
    /// For a checked plan.
    pub fn new(plan: &Plan) -> Detector {
        let mut groups: Vec<((u64, u64), Vec<usize>)> = Vec::new();
        for (index, channel) in plan.channels.iter().enumerate() {
            let band = plan.band_of(channel);
            let key = (band.dwell_s.to_bits(), band.slice_s.to_bits());
            match groups.iter_mut().find(|(other, _)| *other == key) {
                Some((_, channels)) => channels.push(index),
                None => groups.push((key, vec![index])),
            }
        }
        let segments = groups
            .iter()
            .map(|(_, channel_indices)| SegmentDetector::new(plan, channel_indices))
            .collect();
        Detector { segments, sequence: 0 }
    }

    /// The detectors of its segments.
    pub fn segments(&mut self) -> &mut [SegmentDetector] {
        &mut self.segments
    }

    /// Takes in a block and hands the report of every dwell that it completes to `sink`, numbered.
    pub fn push(&mut self, block: &SampleBlock, mut sink: impl FnMut(DwellReport)) {
        for segment in &mut self.segments {
            segment.push(block, &mut |report| {
                sink(DwellReport { sequence: self.sequence, ..report });
                self.sequence += 1;
            });
        }
    }

    /// Ends the run of samples; what is complete of a last, shorter dwell is reported.
    pub fn finish(&mut self, mut sink: impl FnMut(DwellReport)) {
        for segment in &mut self.segments {
            segment.finish(&mut |report| {
                sink(DwellReport { sequence: self.sequence, ..report });
                self.sequence += 1;
            });
        }
    }
}

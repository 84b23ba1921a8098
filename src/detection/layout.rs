//! Which bins belong to which channel, and which cells of the block serve as noise reference.

use super::plan::{Channel, Plan};

/// A stretch of neighbouring bins, each with the share of it that counts (0 to 1).
#[derive(Clone, Debug, PartialEq)]
pub struct BinSpan {
    /// Index of the first bin, by rising frequency.
    pub first: usize,
    /// Share of each bin, from the first on; not all 0.
    pub weights: Vec<f64>,
    /// Sum of the weights (bins).
    pub width_bins: f64,
}

impl BinSpan {
    /// Mean power per bin of a spectrum over the span.
    pub fn mean_power(&self, spectrum: &[f32]) -> f64 {
        let bins = &spectrum[self.first..self.first + self.weights.len()];
        let sum: f64 = bins.iter().zip(&self.weights).map(|(p, w)| f64::from(*p) * w).sum();
        sum / self.width_bins
    }

    /// Index of the bin after the last.
    pub fn end(&self) -> usize {
        self.first + self.weights.len()
    }
}

/// A channel laid over the bins.
#[derive(Clone, Debug, PartialEq)]
pub struct ChannelSpan {
    /// Index of the channel in the plan.
    pub channel_index: usize,
    /// Its bins.
    pub span: BinSpan,
    /// The channel's bandwidth (bins); wider than the span where DC bins are left out.
    pub bandwidth_bins: f64,
    /// Position of its centre across the usable bandwidth (-1 to 1).
    pub position: f64,
    /// Which reference cell is this channel itself.
    pub own_reference: usize,
}

/// A stretch of the block whose energy may tell the noise floor.
#[derive(Clone, Debug, PartialEq)]
pub struct ReferenceCell {
    /// Its bins.
    pub span: BinSpan,
    /// Position of its middle across the usable bandwidth (-1 to 1).
    pub position: f64,
}

/// The block's bins, laid out for one plan.
#[derive(Clone, Debug, PartialEq)]
pub struct Layout {
    /// Distance between bins (Hz).
    pub bin_width_hz: f64,
    /// The channels, in the order asked for.
    pub channels: Vec<ChannelSpan>,
    /// Reference cells by rising frequency: every channel of the plan, and the stretches between.
    pub references: Vec<ReferenceCell>,
}

/// The least that a cell between channels may be [bins]: smaller ones tell little and cost the same.
const CELL_BINS_MIN: usize = 8;

/// Cells between channels are made no wider than this share of the usable bandwidth, so that a
/// narrow block with one wide channel still has several.
const CELLS_ACROSS_MIN: usize = 48;

impl Layout {
    /// Lays the plan's channels over the bins; `wanted` are the indices of those that get verdicts,
    /// the others serve as reference only.
    ///
    /// # Panics
    /// If a channel has no bin left outside the DC guard or lies outside the block: the configuration
    /// has checked both.
    pub fn new(plan: &Plan, wanted: &[usize]) -> Layout {
        let grid = Grid::new(plan);
        let mut references: Vec<(ReferenceCell, Option<usize>)> = plan
            .channels
            .iter()
            .enumerate()
            .map(|(index, channel)| (grid.reference(grid.channel_span(channel)), Some(index)))
            .collect();
        references.sort_by_key(|(cell, _)| cell.span.first);
        let between = grid.cells_between(&references);
        references.extend(between.into_iter().map(|cell| (cell, None)));
        references.sort_by_key(|(cell, _)| cell.span.first);
        let channels = wanted
            .iter()
            .map(|&channel_index| {
                let channel = &plan.channels[channel_index];
                let is_own =
                    |(_, index): &(ReferenceCell, Option<usize>)| *index == Some(channel_index);
                ChannelSpan {
                    channel_index,
                    span: grid.channel_span(channel),
                    bandwidth_bins: channel.bandwidth_hz / grid.bin_width_hz,
                    position: grid.position(grid.bin_of(channel.centre_hz)),
                    own_reference: references.iter().position(is_own).expect("a cell each"),
                }
            })
            .collect();
        let references = references.into_iter().map(|(cell, _)| cell).collect();
        Layout { bin_width_hz: grid.bin_width_hz, channels, references }
    }
}

/// Bins and frequencies of the block.
struct Grid {
    bin_width_hz: f64,
    centre_hz: f64,
    length: usize,
    /// Half the usable bandwidth (bins).
    usable_half_bins: f64,
    /// Half the DC guard (bins); 0 leaves DC in.
    guard_half_bins: f64,
    /// Bins to keep between two cells so that their energies are nearly independent.
    separation: usize,
    /// Width of cells between channels (bins).
    cell_bins: usize,
}

impl Grid {
    fn new(plan: &Plan) -> Grid {
        let length = plan.spectrum.transform_length;
        let bin_width_hz = plan.receiver.sample_rate_hz / length as f64;
        let usable_half_bins = 0.5 * plan.receiver.usable_bandwidth_hz / bin_width_hz;
        let narrowest_hz =
            plan.channels.iter().map(|channel| channel.bandwidth_hz).fold(f64::INFINITY, f64::min);
        let cell_bins =
            (narrowest_hz / bin_width_hz).min(2.0 * usable_half_bins / CELLS_ACROSS_MIN as f64);
        Grid {
            bin_width_hz,
            centre_hz: plan.receiver.centre_hz,
            length,
            usable_half_bins,
            guard_half_bins: 0.5 * plan.receiver.dc_guard_hz / bin_width_hz,
            separation: plan.spectrum.window.main_lobe_half_width_bins(),
            cell_bins: (cell_bins as usize).max(CELL_BINS_MIN),
        }
    }

    /// Bin position of a radio frequency, whole numbers at bin centres.
    fn bin_of(&self, frequency_hz: f64) -> f64 {
        (frequency_hz - self.centre_hz) / self.bin_width_hz + (self.length / 2) as f64
    }

    fn position(&self, bin: f64) -> f64 {
        (bin - (self.length / 2) as f64) / self.usable_half_bins
    }

    /// Share of a bin that lies in the DC guard.
    fn in_dc_guard(&self, bin: usize) -> bool {
        let distance = (bin as f64 - (self.length / 2) as f64).abs();
        self.guard_half_bins > 0.0 && distance < self.guard_half_bins + 0.5
    }

    fn channel_span(&self, channel: &Channel) -> BinSpan {
        let (low_hz, high_hz) = channel.edges_hz();
        let (low, high) = (self.bin_of(low_hz), self.bin_of(high_hz));
        // A bin reaches half a bin either side of its centre.
        let first = (low + 0.5).floor();
        let last = (high + 0.5).ceil() - 1.0;
        assert!(
            first >= 0.0 && last < self.length as f64,
            "channel {} outside the block",
            channel.id
        );
        let share = |bin: usize| {
            let covered = (high.min(bin as f64 + 0.5) - low.max(bin as f64 - 0.5)).clamp(0.0, 1.0);
            if self.in_dc_guard(bin) { 0.0 } else { covered }
        };
        let weights: Vec<f64> = (first as usize..=last as usize).map(share).collect();
        let width_bins: f64 = weights.iter().sum();
        assert!(width_bins > 0.0, "channel {} has no bin outside the DC guard", channel.id);
        BinSpan { first: first as usize, weights, width_bins }
    }

    fn reference(&self, span: BinSpan) -> ReferenceCell {
        let middle = span.first as f64 + 0.5 * (span.weights.len() as f64 - 1.0);
        ReferenceCell { position: self.position(middle), span }
    }

    /// Cells in the stretches that no channel covers, each kept apart from its neighbours.
    fn cells_between(&self, channels: &[(ReferenceCell, Option<usize>)]) -> Vec<ReferenceCell> {
        let middle = (self.length / 2) as f64;
        let first_usable = (middle - self.usable_half_bins).ceil().max(0.0) as usize;
        let end_usable = ((middle + self.usable_half_bins).floor() as usize + 1).min(self.length);
        let mut cells = Vec::new();
        let mut from = first_usable;
        for (cell, _) in channels {
            self.tile(from, cell.span.first.saturating_sub(self.separation), &mut cells);
            from = from.max(cell.span.end() + self.separation);
        }
        self.tile(from, end_usable, &mut cells);
        cells
    }

    /// Cuts the bins `from..end` into cells, leaving out the DC guard.
    fn tile(&self, from: usize, end: usize, cells: &mut Vec<ReferenceCell>) {
        let mut first = from;
        while first + CELL_BINS_MIN <= end {
            let last = (first + self.cell_bins).min(end);
            if let Some(guarded) = (first..last).rev().find(|bin| self.in_dc_guard(*bin)) {
                first = guarded + 1;
                continue;
            }
            if last - first < CELL_BINS_MIN {
                return;
            }
            let weights = vec![1.0; last - first];
            let width_bins = weights.len() as f64;
            cells.push(self.reference(BinSpan { first, weights, width_bins }));
            first = last + self.separation;
        }
    }
}

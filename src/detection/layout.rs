//! Which bins belong to which channel, and which cells of the block serve as noise reference.

use super::plan::{Channel, Plan};

/// A stretch of neighbouring whole bins, as a half-open range by rising frequency. Bins of the DC
/// guard inside it do not count.
///
/// Whole bins, so that the distribution of the energy depends on their number alone; what the edges
/// miss or hold too much of a channel is at most half a bin each, and levels are referred to the
/// channel's true bandwidth.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct BinSpan {
    /// The first bin.
    pub first: usize,
    /// The bin after the last.
    pub end: usize,
    /// First bin of the DC guard within the span, and the bin after its last; equal where there is
    /// none.
    pub guard: (usize, usize),
}

impl BinSpan {
    /// How many bins count; at least 1.
    pub fn bins(&self) -> usize {
        self.end - self.first - (self.guard.1 - self.guard.0)
    }

    /// Mean power per bin of a spectrum over the span.
    pub fn mean_power(&self, spectrum: &[f32]) -> f64 {
        let sum = |from: usize, to: usize| -> f64 {
            spectrum[from..to].iter().map(|power| f64::from(*power)).sum()
        };
        (sum(self.first, self.guard.0) + sum(self.guard.1, self.end)) / self.bins() as f64
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

/// The least that a cell between channels may be [bins]: smaller ones tell little and cost the
/// same.
const CELL_BINS_MIN: usize = 8;

/// Cells between channels are made no wider than this share of the usable bandwidth, so that a
/// narrow block with one wide channel still has several.
const CELLS_ACROSS_MIN: usize = 48;

impl Layout {
    /// Lays the plan's channels over the bins; `wanted` are the indices of those that get verdicts,
    /// the others serve as reference only.
    ///
    /// # Panics
    /// If a channel has no bin left outside the DC guard or lies outside the block: the
    /// configuration has checked both.
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

    /// Whether the DC guard reaches into a bin.
    fn in_dc_guard(&self, bin: usize) -> bool {
        let distance = (bin as f64 - (self.length / 2) as f64).abs();
        self.guard_half_bins > 0.0 && distance < self.guard_half_bins + 0.5
    }

    fn span(&self, first: usize, end: usize) -> BinSpan {
        let guarded = |bin: &usize| self.in_dc_guard(*bin);
        let guard = match ((first..end).find(guarded), (first..end).rfind(guarded)) {
            (Some(from), Some(last)) => (from, last + 1),
            _ => (end, end),
        };
        BinSpan { first, end, guard }
    }

    /// The whole bins that come nearest to the channel: as many as its bandwidth holds, rounded, at
    /// least one, and centred on it as well as may be.
    fn channel_span(&self, channel: &Channel) -> BinSpan {
        let count = (channel.bandwidth_hz / self.bin_width_hz).round().max(1.0);
        let first = (self.bin_of(channel.centre_hz) - 0.5 * (count - 1.0)).round();
        assert!(
            first >= 0.0 && first + count <= self.length as f64,
            "channel {} outside the block",
            channel.id
        );
        let span = self.span(first as usize, (first + count) as usize);
        assert!(span.bins() > 0, "channel {} has no bin outside the DC guard", channel.id);
        span
    }

    fn reference(&self, span: BinSpan) -> ReferenceCell {
        let middle = 0.5 * (span.first + span.end - 1) as f64;
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
            from = from.max(cell.span.end + self.separation);
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
            cells.push(self.reference(self.span(first, last)));
            first = last + self.separation;
        }
    }
}

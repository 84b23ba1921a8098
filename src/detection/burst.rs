//! Short bursts: a transmission of some milliseconds is averaged away in a dwell, but stands out in
//! a slice.
//!
//! Every slice is referred to its own floor: the dwell's floor times the factor by which all kept
//! reference cells of the slice stand above it. A step of gain or an impulse that lifts the whole
//! block lifts that factor too and is no burst.

use super::floor::{FloorAt, FloorFit, FloorModel};
use super::statistics::quadratic::GammaSum;
use super::statistics::ratio::RatioTable;

/// Share of a dwell's false-alarm probability that its slices may take together. The dwell's own
/// test has the rest, which costs it 0.02 dB at most.
pub const BURST_SHARE: f64 = 0.1;

/// The factor of each slice over the dwell's floor, by the kept reference cells, weighted by looks.
/// `slices` holds the mean power per bin of every reference cell, slice after slice.
pub(super) fn slice_factors(
    model: &FloorModel,
    fit: &FloorFit,
    slices: &[f32],
    factors: &mut Vec<f64>,
) {
    factors.clear();
    factors.extend(slices.chunks_exact(model.cell_count()).map(|cells| {
        let mut sum = 0.0;
        let mut weight = 0.0;
        for (floor, looks, energy) in model.kept_cells(fit, cells) {
            sum += looks * f64::from(energy) / floor;
            weight += looks;
        }
        sum / weight
    }));
}

/// The test of one channel's slices.
#[derive(Clone, Debug)]
pub(super) struct BurstTest {
    table: RatioTable,
    slices: f64,
}

impl BurstTest {
    /// For slices whose energy has the given law; all together exceed their threshold with at most
    /// `pfa`, whatever their dependence (Bonferroni's bound).
    pub(super) fn new(slice_energy: GammaSum, slices: usize, pfa: f64, pd: f64) -> BurstTest {
        let slices = slices as f64;
        BurstTest { table: RatioTable::new(slice_energy, pfa / slices, pd), slices }
    }

    /// Threshold of a slice over its own floor, where the dwell's floor has the given looks.
    ///
    /// A slice's own factor rests on a slice's share of the looks behind the dwell's floor.
    pub(super) fn threshold(&self, floor_looks: f64) -> f64 {
        self.table.at(floor_looks / self.slices).0
    }

    /// Whether any slice stands out. `energies` are the channel's by slice, `factors` the slices'.
    pub(super) fn finds(
        &self,
        floor: FloorAt,
        factors: &[f64],
        energies: impl Iterator<Item = f64>,
    ) -> bool {
        let threshold = self.threshold(floor.looks);
        let stands_out = |(energy, factor): (f64, &f64)| energy > threshold * floor.mean * factor;
        energies.zip(factors).any(stands_out)
    }
}

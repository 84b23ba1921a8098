//! From the energies of one dwell to a verdict per channel.

use std::collections::HashMap;
use std::sync::Arc;

use super::floor::{FloorAt, FloorFit, FloorModel};
use super::layout::{ChannelSpan, Layout};
use super::plan::Plan;
use super::statistics::quadratic::GammaSum;
use super::statistics::ratio::RatioTable;
use super::statistics::weights::Weights;
use super::verdict::{Levels, Reason, Reasons, State, Verdict};

/// What makes a whole dwell unfit for some or all claims.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Integrity {
    /// Reasons that turn every verdict of the dwell into `unknown`.
    pub reasons: Reasons,
}

/// Everything about a decision that does not depend on the samples: the floor model and, per
/// channel, thresholds and sensitivities. Made once for each number of transforms that a dwell can
/// have.
#[derive(Clone, Debug)]
pub struct Decision {
    model: FloorModel,
    tables: Vec<Arc<RatioTable>>,
    protection_levels_db: Vec<f64>,
    reference_looks: f64,
}

impl Decision {
    /// For dwells of `transforms` transforms.
    pub fn new(plan: &Plan, layout: &Layout, weights: &mut Weights, transforms: usize) -> Decision {
        let mut energies: HashMap<usize, GammaSum> = HashMap::new();
        let mut energy_of = |bins: usize| {
            energies.entry(bins).or_insert_with(|| weights.energy(transforms, bins)).clone()
        };
        let cell_looks: Vec<f64> =
            layout.references.iter().map(|cell| energy_of(cell.span.bins()).looks()).collect();
        let mut shared: HashMap<(usize, usize), Arc<RatioTable>> = HashMap::new();
        let tables: Vec<Arc<RatioTable>> = layout
            .channels
            .iter()
            .map(|channel| {
                let band_index = plan.channels[channel.channel_index].band_index;
                let band = &plan.bands[band_index];
                let bins = channel.span.bins();
                let make = || Arc::new(RatioTable::new(energy_of(bins), band.pfa, band.pd));
                shared.entry((bins, band_index)).or_insert_with(make).clone()
            })
            .collect();
        let protection_levels_db = layout
            .channels
            .iter()
            .map(|channel| plan.band_of(&plan.channels[channel.channel_index]).protection_level_db)
            .collect();
        Decision {
            model: FloorModel::new(&plan.floor, &layout.references, &cell_looks),
            tables,
            protection_levels_db,
            reference_looks: cell_looks.iter().sum(),
        }
    }

    /// Equivalent looks of a channel, by its place in the layout.
    pub fn looks(&self, channel: usize) -> f64 {
        self.tables[channel].energy().looks()
    }

    /// Looks of all reference cells together: the most that a floor estimate can rest on.
    pub fn reference_looks(&self) -> f64 {
        self.reference_looks
    }

    /// Threshold (ratio to the floor) and required SNR (linear) of a channel, by its place in the
    /// layout, for a floor of the given looks.
    pub fn threshold(&self, channel: usize, floor_looks: f64) -> (f64, f64) {
        self.tables[channel].at(floor_looks)
    }

    /// The verdicts of one dwell, appended to `verdicts`.
    ///
    /// `spectrum` is the dwell's averaged power per bin by rising frequency; `scratch` is reused
    /// from dwell to dwell.
    pub fn decide(
        &self,
        layout: &Layout,
        spectrum: &[f32],
        integrity: Integrity,
        scratch: &mut Scratch,
        verdicts: &mut Vec<Verdict>,
    ) {
        let Scratch { energies, fit, .. } = scratch;
        energies.clear();
        energies.extend(layout.references.iter().map(|cell| cell.span.mean_power(spectrum)));
        let mut reasons = integrity.reasons;
        if energies.iter().any(|energy| !energy.is_finite()) {
            reasons.insert(Reason::NotFinite);
        } else if energies.iter().any(|energy| *energy <= 0.0) {
            reasons.insert(Reason::NoNoise);
        }
        let measurable = !reasons.contains(Reason::NotFinite) && !reasons.contains(Reason::NoNoise);
        let fitted = measurable && self.model.fit(energies, fit);
        if measurable && !fitted {
            reasons.insert(Reason::NoReference);
        }
        for (index, channel) in layout.channels.iter().enumerate() {
            let floor = if fitted {
                let Scratch { energies, fit, spare } = scratch;
                self.model.at(fit, energies, channel.position, channel.own_reference, spare)
            } else {
                None
            };
            let mut reasons = reasons;
            if fitted && floor.is_none() {
                reasons.insert(Reason::NoReference);
            }
            let power = scratch.energies[channel.own_reference];
            verdicts.push(self.verdict(index, channel, power, floor, reasons));
        }
    }

    /// One channel's verdict; `reasons` are those that stand against any claim.
    fn verdict(
        &self,
        index: usize,
        channel: &ChannelSpan,
        power: f64,
        floor: Option<FloorAt>,
        mut reasons: Reasons,
    ) -> Verdict {
        let channel_index = channel.channel_index;
        let Some(floor) = floor else {
            assert!(!reasons.is_empty(), "no floor has a reason");
            return Verdict { channel_index, state: State::Unknown, reasons, levels: None };
        };
        let (threshold, snr) = self.tables[index].at(floor.looks);
        let floor_db = decibels(floor.mean * channel.bandwidth_bins);
        let levels = Levels {
            power_db: decibels(power * channel.bandwidth_bins),
            floor_db,
            threshold_db: floor_db + decibels(threshold),
            sensitivity_db: floor_db + decibels(snr),
        };
        let state = if !reasons.is_empty() {
            State::Unknown
        } else if power > threshold * floor.mean {
            State::Occupied
        } else if levels.sensitivity_db > self.protection_levels_db[index] {
            reasons.insert(Reason::Insensitive);
            State::Unknown
        } else {
            State::Idle
        };
        Verdict { channel_index, state, reasons, levels: Some(levels) }
    }
}

/// Buffers of [`Decision::decide`], kept from dwell to dwell.
#[derive(Clone, Debug, Default)]
pub struct Scratch {
    energies: Vec<f64>,
    fit: FloorFit,
    spare: FloorFit,
}

/// A power ratio in decibels.
fn decibels(ratio: f64) -> f64 {
    10.0 * ratio.log10()
}

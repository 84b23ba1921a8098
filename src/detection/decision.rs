//! From the energies of one dwell to a verdict per channel.

use std::collections::HashMap;
use std::sync::Arc;

use super::burst::{BURST_SHARE, BurstTest, slice_factors};
use super::floor::{FloorAt, FloorFit, FloorModel};
use super::layout::{ChannelSpan, Layout};
use super::memory::FloorMemory;
use super::plan::Plan;
use super::slices::SliceView;
use super::statistics::ratio::RatioTable;
use super::statistics::weights::Weights;
use super::verdict::{Levels, Reason, Reasons, State, Verdict};

/// What one dwell has gathered.
#[derive(Clone, Copy, Debug)]
pub struct Evidence<'a> {
    /// Averaged power per bin by rising frequency.
    pub spectrum: &'a [f32],
    /// Mean power per bin of every reference cell of the layout, slice after slice; empty when the
    /// dwell was not sliced.
    pub slices: &'a [f32],
    /// Reasons that turn every verdict of the dwell into `unknown`.
    pub reasons: Reasons,
    /// Length of the dwell (ns).
    pub observed_ns: i64,
}

/// The tests of one kind of channel: all that have the same number of bins and the same band.
#[derive(Clone, Debug)]
struct Tests {
    dwell: RatioTable,
    /// `None` for a dwell of a single slice.
    burst: Option<BurstTest>,
}

impl Tests {
    /// Threshold (ratio to the floor) and required SNR (linear) for a floor of the given looks,
    /// where only a share of the dwell's slices is left.
    ///
    /// The table is of whole dwells. The looks that the channel lost are charged to the floor
    /// instead, so that the variance of the ratio is right; only its skewness is a little off.
    fn at(&self, looks_floor: f64, share: f64) -> (f64, f64) {
        let lost = (1.0 / share - 1.0) / self.dwell.energy().looks();
        self.dwell.at(1.0 / (1.0 / looks_floor + lost))
    }
}

/// Everything about a decision that does not depend on the samples: the floor model and, per
/// channel, thresholds and sensitivities. Made once for each number of slices that a dwell can
/// have.
#[derive(Clone, Debug)]
pub struct Decision {
    model: FloorModel,
    tests: Vec<Arc<Tests>>,
    protection_levels_db: Vec<f64>,
    reference_looks: f64,
}

impl Decision {
    /// For dwells of `slices` slices of `transforms_per_slice` transforms each.
    pub fn new(
        plan: &Plan,
        layout: &Layout,
        weights: &mut Weights,
        transforms_per_slice: usize,
        slices: usize,
    ) -> Decision {
        let transforms = transforms_per_slice * slices;
        let mut looks_of: HashMap<usize, f64> = HashMap::new();
        let cell_looks: Vec<f64> = layout
            .references
            .iter()
            .map(|cell| {
                let bins = cell.span.bins();
                let looks = || weights.energy(transforms, bins).looks();
                *looks_of.entry(bins).or_insert_with(looks)
            })
            .collect();
        let mut shared: HashMap<(usize, usize), Arc<Tests>> = HashMap::new();
        let tests: Vec<Arc<Tests>> = layout
            .channels
            .iter()
            .map(|channel| {
                let band_index = plan.channels[channel.channel_index].band_index;
                let band = &plan.bands[band_index];
                let bins = channel.span.bins();
                let make = || {
                    let for_slices = if slices > 1 { BURST_SHARE } else { 0.0 };
                    let pfa = (1.0 - for_slices) * band.pfa;
                    let dwell = RatioTable::new(weights.energy(transforms, bins), pfa, band.pd);
                    let burst = (slices > 1).then(|| {
                        let energy = weights.energy(transforms_per_slice, bins);
                        BurstTest::new(energy, slices, for_slices * band.pfa, band.pd)
                    });
                    Arc::new(Tests { dwell, burst })
                };
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
            tests,
            protection_levels_db,
            reference_looks: cell_looks.iter().sum(),
        }
    }

    /// Equivalent looks of a channel, by its place in the layout.
    pub fn looks(&self, channel: usize) -> f64 {
        self.tests[channel].dwell.energy().looks()
    }

    /// Looks of all reference cells together: the most that a floor estimate can rest on.
    pub fn reference_looks(&self) -> f64 {
        self.reference_looks
    }

    /// Threshold (ratio to the floor) and required SNR (linear) of a channel, by its place in the
    /// layout, for a floor of the given looks.
    pub fn threshold(&self, channel: usize, floor_looks: f64) -> (f64, f64) {
        self.tests[channel].dwell.at(floor_looks)
    }

    /// Threshold (ratio to the floor) at which a single slice of a channel decides, by its place in
    /// the layout, for a floor of the given looks; `None` for a dwell of a single slice.
    pub fn burst_threshold(&self, channel: usize, floor_looks: f64) -> Option<f64> {
        self.tests[channel].burst.as_ref().map(|test| test.threshold(floor_looks))
    }

    /// The verdicts of one dwell, appended to `verdicts`. `memory` is the segment's; `scratch` is
    /// reused from dwell to dwell.
    pub fn decide(
        &self,
        layout: &Layout,
        evidence: Evidence<'_>,
        memory: &mut FloorMemory,
        scratch: &mut Scratch,
        verdicts: &mut Vec<Verdict>,
    ) {
        let mut reasons = evidence.reasons;
        let energies = &mut scratch.energies;
        energies.clear();
        let cells = layout.references.iter();
        energies.extend(cells.map(|cell| cell.span.mean_power(evidence.spectrum)));
        let finite = energies.iter().all(|energy| energy.is_finite());
        let share = if finite { self.level_slices(evidence.slices, scratch) } else { 1.0 };
        // With half or less left, what is left may be no better than what was dropped.
        if share <= 0.5 {
            reasons.insert(Reason::Impulses);
        }
        let fitted = share > 0.5 && self.fit(scratch, &mut reasons);
        let Scratch { energies, fit, spare, floors, factors, view, .. } = scratch;
        floors.clear();
        floors.extend(layout.channels.iter().map(|channel| {
            let (position, own) = (channel.position, channel.own_reference);
            let floor = fitted.then(|| self.model.at(fit, energies, position, own, spare))?;
            floor.map(|floor| FloorAt { looks: share * floor.looks, ..floor })
        }));
        factors.clear();
        if fitted {
            slice_factors(&self.model, fit, evidence.slices, factors);
            let hit = factors.iter_mut().zip(&view.clean).filter(|(_, clean)| !**clean);
            hit.for_each(|(factor, _)| *factor = f64::INFINITY);
        }
        if reasons.is_empty() {
            memory.observe(floors, evidence.observed_ns);
        }
        for (index, channel) in layout.channels.iter().enumerate() {
            let own = channel.own_reference;
            let mut reasons = reasons;
            if floors[index].is_none() && reasons.is_empty() {
                reasons.insert(Reason::NoReference);
            }
            let unaccepted = floors[index].map_or(0.0, |floor| memory.unaccepted(index, floor));
            let slices = evidence.slices.chunks_exact(self.model.cell_count());
            let burst = match (&self.tests[index].burst, floors[index]) {
                (Some(test), Some(floor)) => {
                    test.finds(floor, factors, slices.map(|cells| f64::from(cells[own])))
                }
                _ => false,
            };
            let found =
                Found { power: energies[own], floor: floors[index], burst, unaccepted, share };
            verdicts.push(self.verdict(index, channel, found, reasons));
        }
    }

    /// Looks at the slices and, where they are not alike, makes the energies anew from the clean
    /// ones. Returns the share of slices that the energies come from.
    ///
    /// The cells to go by are those that a fit to the usual energies keeps: impulses do not reach
    /// it.
    fn level_slices(&self, slices: &[f32], scratch: &mut Scratch) -> f64 {
        let Scratch { energies, fit, view, kept, .. } = scratch;
        let count = slices.len() / energies.len();
        if !view.find_usual(slices, energies.len()) || !self.model.fit(&view.usual, fit) {
            return 1.0;
        }
        kept.clear();
        let looks = self.model.kept_looks(fit);
        kept.extend(looks.map(|looks| looks.map(|looks| looks / count as f64)));
        view.examine(slices, kept);
        if view.calm {
            return 1.0;
        }
        let clean = view.clean_count();
        if clean > 0 {
            view.levelled(slices, energies);
        }
        clean as f64 / count as f64
    }

    /// Fits the floor to the energies; what stands in the way is added to `reasons`.
    fn fit(&self, scratch: &mut Scratch, reasons: &mut Reasons) -> bool {
        let Scratch { energies, fit, .. } = scratch;
        if energies.iter().any(|energy| !energy.is_finite()) {
            reasons.insert(Reason::NotFinite);
        } else if energies.iter().any(|energy| *energy <= 0.0) {
            reasons.insert(Reason::NoNoise);
        }
        if reasons.contains(Reason::NotFinite) || reasons.contains(Reason::NoNoise) {
            return false;
        }
        let fitted = self.model.fit(energies, fit);
        if !fitted {
            reasons.insert(Reason::NoReference);
        }
        fitted
    }

    /// One channel's verdict; `reasons` are those that stand against any claim.
    fn verdict(
        &self,
        index: usize,
        channel: &ChannelSpan,
        found: Found,
        mut reasons: Reasons,
    ) -> Verdict {
        let channel_index = channel.channel_index;
        let Some(floor) = found.floor else {
            assert!(!reasons.is_empty(), "no floor has a reason");
            return Verdict { channel_index, state: State::Unknown, reasons, levels: None };
        };
        let (threshold, snr) = self.tests[index].at(floor.looks, found.share);
        let floor_db = decibels(floor.mean * channel.bandwidth_bins);
        let levels = Levels {
            power_db: decibels(found.power * channel.bandwidth_bins),
            floor_db,
            threshold_db: floor_db + decibels(threshold),
            sensitivity_db: floor_db + decibels(snr),
        };
        let protection_level_db = self.protection_levels_db[index];
        let state = if !reasons.is_empty() {
            State::Unknown
        } else if found.power > threshold * floor.mean {
            State::Occupied
        } else if found.burst {
            reasons.insert(Reason::Burst);
            State::Occupied
        } else {
            if levels.sensitivity_db > protection_level_db {
                reasons.insert(Reason::Insensitive);
            }
            if decibels(found.unaccepted * channel.bandwidth_bins) > protection_level_db {
                reasons.insert(Reason::FloorRaised);
            }
            if reasons.is_empty() { State::Idle } else { State::Unknown }
        };
        Verdict { channel_index, state, reasons, levels: Some(levels) }
    }
}

/// What a dwell found in one channel.
struct Found {
    /// Mean power per bin.
    power: f64,
    floor: Option<FloorAt>,
    /// Whether a slice stands out.
    burst: bool,
    /// The part of the floor that is not accepted as noise (mean power per bin).
    unaccepted: f64,
    /// Share of the dwell's slices that the power and the floor come from.
    share: f64,
}

/// Buffers of [`Decision::decide`], kept from dwell to dwell.
#[derive(Clone, Debug, Default)]
pub struct Scratch {
    energies: Vec<f64>,
    fit: FloorFit,
    spare: FloorFit,
    floors: Vec<Option<FloorAt>>,
    factors: Vec<f64>,
    view: SliceView,
    kept: Vec<Option<f64>>,
}

/// A power ratio in decibels.
fn decibels(ratio: f64) -> f64 {
    10.0 * ratio.log10()
}

//! The slices of one dwell beside each other: steps of gain, and impulses that fill the block.
//!
//! A step of gain inside a dwell makes its slices unequal, so that the dwell is worth fewer looks
//! than counted. An impulse of some microseconds (ignition, a switch) is worse: in each channel it
//! leaves a random energy of very few looks, far from the law of noise, and lights up all channels.
//!
//! Both show in all cells at once. Within one slice, the factors by which the cells stand over
//! their usual energy agree for a step of gain and scatter for an impulse. Quantiles over cells and
//! over slices do not notice transmissions, which change a few cells only.
//!
//! What this cannot do: pulses so frequent that they hit most slices leave nothing to compare with.

/// Slices that a usual energy can be told from; a dwell of fewer is taken as it is.
const SLICES_MIN: usize = 4;

/// A cell's usual energy is the one that this share of its slices stays under: impulses may hit the
/// rest.
const USUAL_SHARE: f64 = 0.3;

/// Cells that a scatter can be told from.
const CELLS_MIN: usize = 8;

/// A slice's factor or scatter is out of the ordinary this many standard errors from it: noise
/// alone does that to one slice in some hundred million.
const DEVIATIONS: f64 = 6.0;

/// How much more than noise the cells of a crowded band may scatter: signals narrower than their
/// channel have fewer looks, and speech has pauses.
const CROWDED_FACTOR: f64 = 3.0;

/// Median of the magnitude of a standard normal variate, and the standard error of that median
/// times the root of the number of variates: `1 / (2 f)` with the density `f` there.
const MEDIAN_MAGNITUDE: f64 = 0.6745;
const MEDIAN_ERROR: f64 = 0.787;

/// What the slices of a dwell are like.
#[derive(Clone, Debug, Default)]
pub(super) struct SliceView {
    /// Factor of each slice over the usual energy of its cells.
    pub(super) gains: Vec<f64>,
    /// Whether the slice holds noise and transmissions only.
    pub(super) clean: Vec<bool>,
    /// Whether there is nothing to correct: all slices clean and alike.
    pub(super) calm: bool,
    /// A low quantile of each cell's energy over the slices.
    pub(super) usual: Vec<f64>,
    values: Vec<f64>,
}

impl SliceView {
    /// Finds the usual energy of each of `cells` cells in `slices`, their energies slice after
    /// slice. Returns whether there are slices enough to tell, and noise in them.
    pub(super) fn find_usual(&mut self, slices: &[f32], cells: usize) -> bool {
        let count = slices.len() / cells;
        self.gains.clear();
        self.gains.resize(count, 1.0);
        self.clean.clear();
        self.clean.resize(count, true);
        self.calm = true;
        self.usual.clear();
        if count < SLICES_MIN {
            return false;
        }
        for cell in 0..cells {
            self.values.clear();
            self.values.extend(slices.iter().skip(cell).step_by(cells).map(|e| f64::from(*e)));
            self.usual.push(quantile(&mut self.values, USUAL_SHARE));
        }
        self.usual.iter().all(|energy| *energy > 0.0 && energy.is_finite())
    }

    /// Judges every slice against the usual energies. `kept` tells the cells to go by, with the
    /// looks of each in one slice; where they are too few, it is made all.
    pub(super) fn examine(&mut self, slices: &[f32], kept: &mut [Option<f64>]) {
        let cells = kept.len();
        let count = self.gains.len();
        let mut kept_count = kept.iter().flatten().count();
        let mut scatter_factor = 1.0;
        // Few cells are kept in a crowded band, or where impulses hit most slices. Steady signals
        // scatter little, impulses a lot: all cells can tell these two apart.
        if kept_count < CELLS_MIN {
            let typical = kept.iter().flatten().sum::<f64>() / kept_count.max(1) as f64;
            kept.iter_mut().for_each(|looks| *looks = Some(typical));
            kept_count = cells;
            scatter_factor = CROWDED_FACTOR;
        }
        if kept_count < CELLS_MIN {
            return;
        }
        let looks: f64 = kept.iter().flatten().sum();
        // The median's own error, and that of the usual energies.
        let share = 1.0 + 1.57 / count as f64;
        let gain_limit = DEVIATIONS * 1.2533 * (share / looks).sqrt();
        let scatter_limit = (MEDIAN_MAGNITUDE
            + DEVIATIONS * MEDIAN_ERROR / (kept_count as f64).sqrt())
            * share.sqrt()
            * scatter_factor;
        for (slice, energies) in slices.chunks_exact(cells).enumerate() {
            let factor = |cell: usize| f64::from(energies[cell]) / self.usual[cell];
            self.values.clear();
            self.values.extend((0..cells).filter(|&cell| kept[cell].is_some()).map(factor));
            let gain = quantile(&mut self.values, 0.5);
            self.values.clear();
            self.values.extend((0..cells).filter_map(|cell| {
                kept[cell].map(|looks| (factor(cell) / gain - 1.0).abs() * looks.sqrt())
            }));
            self.gains[slice] = gain;
            self.clean[slice] = quantile(&mut self.values, 0.5) <= scatter_limit;
        }
        self.values.clear();
        self.values.extend(&self.gains);
        let middle = quantile(&mut self.values, 0.5);
        self.gains.iter_mut().for_each(|gain| *gain /= middle);
        let alike = self.gains.iter().all(|gain| (gain - 1.0).abs() <= gain_limit);
        self.calm = alike && self.clean.iter().all(|clean| *clean);
    }

    /// How many slices are clean.
    pub(super) fn clean_count(&self) -> usize {
        self.clean.iter().filter(|clean| **clean).count()
    }

    /// Mean energy of each cell over the clean slices, each referred to its gain.
    pub(super) fn levelled(&self, slices: &[f32], energies: &mut [f64]) {
        energies.fill(0.0);
        let rows = slices.chunks_exact(energies.len()).zip(&self.gains).zip(&self.clean);
        for ((row, gain), _) in rows.filter(|(_, clean)| **clean) {
            for (sum, energy) in energies.iter_mut().zip(row) {
                *sum += f64::from(*energy) / gain;
            }
        }
        let count = self.clean_count() as f64;
        energies.iter_mut().for_each(|sum| *sum /= count);
    }
}

/// The value that `share` of all values (below 1) lie under.
fn quantile(values: &mut [f64], share: f64) -> f64 {
    let index = (share * values.len() as f64) as usize;
    *values.select_nth_unstable_by(index, f64::total_cmp).1
}

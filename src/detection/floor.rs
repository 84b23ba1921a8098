//! The noise floor across the reference cells of one dwell.
//!
//! The floor is a smooth curve, `exp(b0 + b1 x + ...)` over the position `x` across the block.
//! Noise energies are gamma variates around it, so the maximum-likelihood fit solves `sum looks_i
//! basis_i (energy_i / floor_i - 1) = 0` (a gamma model with logarithmic link, McCullagh & Nelder,
//! "Generalized linear models", 1989). For a flat floor it is the plain weighted mean of the cells,
//! so the ratio test is cell-averaging CFAR.
//!
//! Occupied cells must not lift the floor. Excision starts from the lowest cells and lets the fit
//! grow towards all cells under a threshold (forward consecutive mean excision, Lehtomaki et al.
//! 2007), which holds while a fair share of every part of the block is idle. The share of noise
//! that each step cuts off is corrected by the mean of the truncated gamma distribution.

use super::layout::ReferenceCell;
use super::plan::{FloorEstimator, FloorSettings, FloorTrend};
use super::statistics::{gamma, normal};

const TERMS_MAX: usize = 3;
type Coefficients = [f64; TERMS_MAX];
type Information = [[f64; TERMS_MAX]; TERMS_MAX];

/// Excision ends when the set of kept cells no longer changes, or after this many rounds.
const ROUNDS_MAX: usize = 30;

/// A cell with a larger share than this of the fit at its own place is taken out by a new fit.
const LEVERAGE_MAX: f64 = 0.1;

/// Most groups of neighbouring cells that the first guess is taken from.
const GROUPS_MAX: usize = 8;

/// Values of the trend's terms at a position: 1, x, x^2 - 1/3.
fn basis(position: f64) -> Coefficients {
    [1.0, position, position * position - 1.0 / 3.0]
}

fn dot(a: &Coefficients, b: &Coefficients, terms: usize) -> f64 {
    (0..terms).map(|k| a[k] * b[k]).sum()
}

/// A cell as the estimator sees it; all but the energy is known beforehand.
#[derive(Clone, Debug)]
struct Cell {
    basis: Coefficients,
    /// Equivalent looks, less what excision costs.
    looks: f64,
    /// Kept while energy over floor is below this.
    ratio_max: f64,
    /// Mean of energy over floor of noise that is kept.
    ratio_mean: f64,
    /// Typical ratio of the lowest cell of this one's group to the floor.
    lowest_ratio: f64,
}

/// The floor estimator for given cells and a given number of transforms per dwell.
#[derive(Clone, Debug)]
pub struct FloorModel {
    terms: usize,
    excising: bool,
    cells: Vec<Cell>,
    /// Groups of neighbouring cells as half-open index ranges.
    groups: Vec<(usize, usize)>,
}

/// A fitted floor. Kept and refilled from dwell to dwell.
#[derive(Clone, Debug, Default)]
pub struct FloorFit {
    coefficients: Coefficients,
    information: Information,
    kept: Vec<bool>,
    /// Energy over fitted floor, over the mean of what is kept.
    ratios: Vec<f64>,
}

/// The floor at one position.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FloorAt {
    /// Mean power per bin.
    pub mean: f64,
    /// Equivalent looks of the estimate: 1 over its relative variance.
    pub looks: f64,
}

impl FloorModel {
    /// For cells with the given equivalent looks each.
    ///
    /// # Panics
    /// If there is not one look count per cell.
    pub fn new(settings: &FloorSettings, cells: &[ReferenceCell], looks: &[f64]) -> FloorModel {
        assert_eq!(cells.len(), looks.len(), "looks of every cell");
        let terms = match settings.trend {
            FloorTrend::Flat => 1,
            FloorTrend::Slope => 2,
            FloorTrend::Curve => 3,
        };
        let count = (cells.len() / 8).clamp(terms.min(2), GROUPS_MAX).min(cells.len().max(1));
        let groups: Vec<(usize, usize)> =
            (0..count).map(|g| (g * cells.len() / count, (g + 1) * cells.len() / count)).collect();
        let group_size = |index: usize| {
            let holds = |group: &&(usize, usize)| (group.0..group.1).contains(&index);
            groups.iter().find(holds).map_or(1, |group| group.1 - group.0)
        };
        let cells = cells
            .iter()
            .zip(looks)
            .enumerate()
            .map(|(index, (cell, &looks))| {
                // Half of all groups have their lowest cell below this share of the distribution.
                let lowest_share = 1.0 - 0.5_f64.powf(1.0 / group_size(index) as f64);
                let deviate = -normal::upper_quantile(lowest_share);
                let lowest_ratio = gamma::wilson_hilferty(looks, deviate).max(1e-3);
                let basis = basis(cell.position);
                match settings.estimator {
                    FloorEstimator::CellAveraging => Cell {
                        basis,
                        looks,
                        ratio_max: f64::INFINITY,
                        ratio_mean: 1.0,
                        lowest_ratio,
                    },
                    FloorEstimator::Excision { rejection } => {
                        let (ratio_max, ratio_mean, efficiency) = truncation(looks, rejection);
                        let looks = looks * efficiency;
                        Cell { basis, looks, ratio_max, ratio_mean, lowest_ratio }
                    }
                }
            })
            .collect();
        let excising = matches!(settings.estimator, FloorEstimator::Excision { .. });
        FloorModel { terms, excising, cells, groups }
    }

    /// Fits the floor to one dwell's mean power per bin of every cell. Returns whether enough cells
    /// are left to tell it: as many as the trend has terms.
    ///
    /// Few cells are no danger: a signal in a cell can only lift the floor, so `occupied` is
    /// claimed against too high a floor, and `idle` only where the sensitivity over that same floor
    /// still reaches the protection level. The estimate's variance enters both.
    ///
    /// # Panics
    /// If there is not one positive, finite energy per cell.
    pub fn fit(&self, energies: &[f64], fit: &mut FloorFit) -> bool {
        self.fit_without(None, energies, fit)
    }

    /// As [`FloorModel::fit`], as if the cell `absent` did not exist.
    fn fit_without(&self, absent: Option<usize>, energies: &[f64], fit: &mut FloorFit) -> bool {
        assert_eq!(energies.len(), self.cells.len(), "an energy of every cell");
        assert!(energies.iter().all(|e| *e > 0.0 && e.is_finite()), "energies are positive");
        fit.kept.clear();
        fit.kept.resize(self.cells.len(), true);
        fit.ratios.clear();
        fit.ratios.resize(self.cells.len(), 1.0);
        let Some(guess) = self.first_guess(absent, energies) else { return false };
        fit.coefficients = guess;
        for _ in 0..ROUNDS_MAX {
            let changed = self.choose(absent, energies, fit);
            if fit.kept.iter().filter(|kept| **kept).count() < self.terms {
                return false;
            }
            if !self.solve(energies, fit) {
                return false;
            }
            if !changed {
                break;
            }
        }
        true
    }

    /// A line through the lowest cell of each group, robust against groups that are full: the
    /// median of the slopes between any two groups (Theil 1950, Sen 1968), then the median of what
    /// is left.
    fn first_guess(&self, absent: Option<usize>, energies: &[f64]) -> Option<Coefficients> {
        let mut points = [(0.0, 0.0); GROUPS_MAX];
        let mut count = 0;
        for &(first, end) in &self.groups {
            let lowest = (first..end)
                .filter(|i| Some(*i) != absent)
                .map(|i| (self.cells[i].basis[1], (energies[i] / self.cells[i].lowest_ratio).ln()))
                .min_by(|a, b| a.1.total_cmp(&b.1));
            if let Some(lowest) = lowest {
                points[count] = lowest;
                count += 1;
            }
        }
        if count == 0 {
            return None;
        }
        let points = &points[..count];
        let mut coefficients = [0.0; TERMS_MAX];
        let mut values = [0.0; GROUPS_MAX * (GROUPS_MAX - 1) / 2];
        if self.terms > 1 && points.len() > 1 {
            let mut count = 0;
            for (j, b) in points.iter().enumerate() {
                for a in &points[..j] {
                    values[count] = (b.1 - a.1) / (b.0 - a.0);
                    count += 1;
                }
            }
            coefficients[1] = median(&mut values[..count]);
        }
        for (value, (x, y)) in values.iter_mut().zip(points.iter()) {
            *value = y - coefficients[1] * x;
        }
        coefficients[0] = median(&mut values[..points.len()]);
        Some(coefficients)
    }

    /// Keeps the cells whose energy lies under their threshold; tells whether that changed
    /// anything.
    fn choose(&self, absent: Option<usize>, energies: &[f64], fit: &mut FloorFit) -> bool {
        let mut changed = false;
        for (i, cell) in self.cells.iter().enumerate() {
            let floor = dot(&fit.coefficients, &cell.basis, self.terms).exp();
            let keep =
                Some(i) != absent && (!self.excising || energies[i] / floor < cell.ratio_max);
            changed |= keep != fit.kept[i];
            fit.kept[i] = keep;
        }
        changed
    }

    /// Solves the likelihood equations over the kept cells by Fisher scoring.
    fn solve(&self, energies: &[f64], fit: &mut FloorFit) -> bool {
        for _ in 0..50 {
            let mut score = [0.0; TERMS_MAX];
            let mut information = [[0.0; TERMS_MAX]; TERMS_MAX];
            for (i, cell) in self.cells.iter().enumerate() {
                let floor = dot(&fit.coefficients, &cell.basis, self.terms).exp();
                let ratio = energies[i] / (floor * cell.ratio_mean);
                fit.ratios[i] = ratio;
                if fit.kept[i] {
                    add_cell(&mut score, &mut information, cell, ratio - 1.0, 1.0, self.terms);
                }
            }
            fit.information = information;
            let Some(step) = solve_positive(&information, &score, self.terms) else {
                return false;
            };
            let mut largest = 0.0_f64;
            for (coefficient, step) in fit.coefficients.iter_mut().zip(step) {
                // A step from far away can overshoot; two units are 8.7 dB.
                *coefficient += step.clamp(-2.0, 2.0);
                largest = largest.max(step.abs());
            }
            if largest < 1e-7 {
                return true;
            }
        }
        true
    }

    /// The floor at a position, without the help of the cell `own`: numerator and denominator of
    /// the ratio test are then independent. `None` where the other cells cannot tell.
    ///
    /// One Newton step takes a cell out that carries little of the fit; for a flat floor it is
    /// exact. Where the cell carries much, the floor is fitted anew into `spare`.
    pub fn at(
        &self,
        fit: &FloorFit,
        energies: &[f64],
        position: f64,
        own: usize,
        spare: &mut FloorFit,
    ) -> Option<FloorAt> {
        if !fit.kept[own] {
            return self.evaluate(fit, position, &fit.information, &[0.0; TERMS_MAX]);
        }
        let cell = &self.cells[own];
        let spread = solve_positive(&fit.information, &cell.basis, self.terms)?;
        if cell.looks * dot(&spread, &cell.basis, self.terms) > LEVERAGE_MAX {
            let fitted = self.fit_without(Some(own), energies, spare);
            return if fitted {
                self.evaluate(spare, position, &spare.information, &[0.0; TERMS_MAX])
            } else {
                None
            };
        }
        let mut information = fit.information;
        let mut score = [0.0; TERMS_MAX];
        add_cell(&mut score, &mut information, cell, fit.ratios[own] - 1.0, -1.0, self.terms);
        self.evaluate(fit, position, &information, &score)
    }

    /// How many reference cells there are.
    pub fn cell_count(&self) -> usize {
        self.cells.len()
    }

    /// The cells that a fit kept: its floor there (mean power per bin), the cell's looks, and the
    /// cell's value among `values`.
    pub fn kept_cells<'a>(
        &'a self,
        fit: &'a FloorFit,
        values: &'a [f32],
    ) -> impl Iterator<Item = (f64, f64, f32)> + 'a {
        let cells = self.cells.iter().zip(&fit.kept).zip(values);
        cells.filter(|((_, kept), _)| **kept).map(|((cell, _), value)| {
            (dot(&fit.coefficients, &cell.basis, self.terms).exp(), cell.looks, *value)
        })
    }

    /// The looks of each cell that a fit kept, `None` for the others.
    pub fn kept_looks<'a>(&'a self, fit: &'a FloorFit) -> impl Iterator<Item = Option<f64>> + 'a {
        self.cells.iter().zip(&fit.kept).map(|(cell, kept)| kept.then_some(cell.looks))
    }

    /// The floor at a position after one Newton step along `score`.
    fn evaluate(
        &self,
        fit: &FloorFit,
        position: f64,
        information: &Information,
        score: &Coefficients,
    ) -> Option<FloorAt> {
        let here = basis(position);
        let spread = solve_positive(information, &here, self.terms)?;
        let step = solve_positive(information, score, self.terms)?;
        let correction = 1.0 + dot(&step, &here, self.terms);
        let mean = dot(&fit.coefficients, &here, self.terms).exp() * correction;
        let variance = dot(&spread, &here, self.terms);
        (variance > 0.0 && mean > 0.0).then(|| FloorAt { mean, looks: 1.0 / variance })
    }
}

/// Adds one cell's share to the likelihood equations, `times` over.
fn add_cell(
    score: &mut Coefficients,
    information: &mut Information,
    cell: &Cell,
    excess: f64,
    times: f64,
    terms: usize,
) {
    for k in 0..terms {
        let weighted = times * cell.looks * cell.basis[k];
        score[k] += weighted * excess;
        for (value, other) in information[k][..terms].iter_mut().zip(&cell.basis) {
            *value += weighted * other;
        }
    }
}

/// Excision of the highest `rejection` share of noise: the ratio to the floor above which a cell is
/// dropped, the mean ratio of what is kept, and the efficiency of the corrected mean.
///
/// The threshold moves with the estimate that it cuts for. With `m(t)` the mean below `t`, the
/// estimate's error is the kept cells' own error over `1 - t m'(t) / m(t)`.
fn truncation(looks: f64, rejection: f64) -> (f64, f64, f64) {
    let limit = gamma::upper_quantile(looks, rejection) / looks;
    let mean = gamma::truncated_mean(looks, 0.0, limit);
    let step = 1e-4 * limit;
    let slope = (gamma::truncated_mean(looks, 0.0, limit + step)
        - gamma::truncated_mean(looks, 0.0, limit - step))
        / (2.0 * step);
    let square = (looks + 1.0) / looks * gamma::lower_tail(looks + 2.0, looks * limit)
        / gamma::lower_tail(looks, looks * limit);
    let feedback = 1.0 - limit * slope / mean;
    let variance = (square - mean * mean) / (mean * mean);
    (limit, mean, (feedback * feedback / (looks * variance)).min(1.0))
}

/// Middle value; of an even count the mean of the middle two.
fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    let half = values.len() / 2;
    if values.len() % 2 == 1 { values[half] } else { 0.5 * (values[half - 1] + values[half]) }
}

/// Solves a symmetric positive definite system of up to three unknowns (Cholesky); `None` where it
/// is not positive definite to working precision.
fn solve_positive(
    matrix: &Information,
    right: &Coefficients,
    terms: usize,
) -> Option<Coefficients> {
    let mut factor = [[0.0; TERMS_MAX]; TERMS_MAX];
    for row in 0..terms {
        for column in 0..=row {
            let known: f64 = (0..column).map(|k| factor[row][k] * factor[column][k]).sum();
            let rest = matrix[row][column] - known;
            if row == column {
                if rest <= 1e-9 * matrix[row][row].max(f64::MIN_POSITIVE) {
                    return None;
                }
                factor[row][row] = rest.sqrt();
            } else {
                factor[row][column] = rest / factor[column][column];
            }
        }
    }
    let mut solution = *right;
    for row in 0..terms {
        let known: f64 = (0..row).map(|k| factor[row][k] * solution[k]).sum();
        solution[row] = (solution[row] - known) / factor[row][row];
    }
    for row in (0..terms).rev() {
        let known: f64 = (row + 1..terms).map(|k| factor[k][row] * solution[k]).sum();
        solution[row] = (solution[row] - known) / factor[row][row];
    }
    solution[terms..].fill(0.0);
    Some(solution)
}

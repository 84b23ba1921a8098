//! The weights of a channel's energy: eigenvalues of the covariance of overlapped transforms and
//! neighbouring bins, for white noise.
//!
//! `X(k, i) = sum_n x(n + i hop) w(n) e^(-2 pi i k n / N)` has, with `m = i - j >= 0`,
//!
//! ```text
//! E X(k, i) X*(l, j) = e^(2 pi i l m hop / N) sum_n w(n) w(n + m hop) e^(-2 pi i (k - l) n / N)
//! ```
//!
//! times the noise power. The energy `sum |X(k, i)|^2` over `K` transforms and `B` bins is then a
//! sum of exponentials weighted by the eigenvalues of this `K B` by `K B` matrix. Up to some
//! hundreds of terms they are computed as such.
//!
//! Beyond that the structure helps. The matrix depends on differences only (up to phases) and is
//! banded both in time (windows that no longer meet) and in frequency (the transform of `w^2` dies
//! out), so every trace `tr C^p`, and with it the whole cumulant generating function, grows
//! linearly in `K` and in `B` once both are wider than the bands: corners, edges and inside add up.
//! Four small boxes give the law for all sizes. The weights that it implies are condensed into a
//! few gamma variates by Gauss quadrature (Golub & Welsch 1969), which keeps the first [`2
//! NODES`](NODES) cumulants.

use std::collections::HashMap;

use nalgebra::DMatrix;
use num_complex::Complex64;
use rustfft::FftPlanner;

use super::quadratic::{GammaSum, Term};

/// Gamma variates that weights are condensed into.
pub const NODES: usize = 8;

/// Largest matrix whose eigenvalues are taken one by one.
const DIRECT_MAX: usize = 40;

/// Correlations below this share of the power count as none when the band's width is measured.
const BAND_EDGE: f64 = 1e-8;

/// The covariance of transforms and bins under one window and hop.
#[derive(Clone, Debug)]
pub struct Weights {
    length: usize,
    hop: usize,
    /// `overlap[m][d]`: the sum over `n` for hops `m`, bins `d` modulo `N`, over `sum w^2`.
    overlap: Vec<Vec<Complex64>>,
    /// Size of a box that is wider than the bands, in transforms and bins.
    transforms_box: usize,
    bins_box: usize,
    /// Measures of boxes already computed, as weights with multiplicity 1.
    boxes: HashMap<(usize, usize), Vec<f64>>,
}

impl Weights {
    /// For window values of one transform and the hop between transforms (samples).
    ///
    /// # Panics
    /// If the hop is 0 or the window is empty.
    pub fn new(window: &[f64], hop: usize) -> Weights {
        assert!(hop > 0 && !window.is_empty(), "hop {hop}, window {}", window.len());
        let length = window.len();
        let energy: f64 = window.iter().map(|w| w * w).sum();
        let transform = FftPlanner::new().plan_fft_forward(length);
        let overlap: Vec<Vec<Complex64>> = (0..length)
            .step_by(hop)
            .map(|shift| {
                let later = |n: usize| window.get(n + shift).copied().unwrap_or(0.0);
                let mut product: Vec<Complex64> =
                    (0..length).map(|n| Complex64::from(window[n] * later(n) / energy)).collect();
                transform.process(&mut product);
                product
            })
            .collect();
        let reaches = |m: &usize| overlap[*m][0].norm_sqr() > BAND_EDGE;
        let band_transforms = (0..overlap.len()).rev().find(reaches).unwrap_or(0);
        let wide = |d: &usize| overlap.iter().any(|lag| lag[*d].norm_sqr() > BAND_EDGE);
        let band_bins = (0..length / 2).rev().find(wide).unwrap_or(0);
        Weights {
            length,
            hop,
            transforms_box: 3 * band_transforms + 2,
            bins_box: 3 * band_bins + 2,
            boxes: HashMap::new(),
            overlap,
        }
    }

    /// The distribution of the energy of `bins` neighbouring bins averaged over `transforms`
    /// transforms, for white noise: mean 1.
    ///
    /// # Panics
    /// If either is 0.
    pub fn energy(&mut self, transforms: usize, bins: usize) -> GammaSum {
        assert!(transforms > 0 && bins > 0, "{transforms} transforms, {bins} bins");
        if transforms * bins <= DIRECT_MAX {
            return self.all_eigenvalues(transforms, bins);
        }
        let scale = 1.0 / (transforms * bins) as f64;
        let measure = self.extrapolated(transforms, bins);
        let trace = (transforms * bins) as f64;
        let terms = condense(&measure, trace)
            .into_iter()
            .map(|(weight, count)| Term { scale: weight * scale, shape: count })
            .collect();
        GammaSum::new(terms)
    }

    /// As [`Weights::energy`], from every eigenvalue whatever the size: time grows with its cube.
    pub fn all_eigenvalues(&mut self, transforms: usize, bins: usize) -> GammaSum {
        let scale = 1.0 / (transforms * bins) as f64;
        let eigenvalues = self.measure(transforms, bins);
        let largest = eigenvalues.iter().copied().fold(0.0, f64::max);
        let terms = eigenvalues
            .iter()
            .filter(|weight| **weight > 1e-12 * largest)
            .map(|weight| Term { scale: weight * scale, shape: 1.0 })
            .collect();
        GammaSum::new(terms)
    }

    /// Eigenvalues of a box.
    fn measure(&mut self, transforms: usize, bins: usize) -> Vec<f64> {
        if let Some(known) = self.boxes.get(&(transforms, bins)) {
            return known.clone();
        }
        let eigenvalues: Vec<f64> = self
            .covariance(transforms, bins)
            .symmetric_eigenvalues()
            .iter()
            .map(|weight| weight.max(0.0))
            .collect();
        self.boxes.insert((transforms, bins), eigenvalues.clone());
        eigenvalues
    }

    fn covariance(&self, transforms: usize, bins: usize) -> DMatrix<Complex64> {
        let turn = std::f64::consts::TAU * self.hop as f64 / self.length as f64;
        DMatrix::from_fn(transforms * bins, transforms * bins, |row, column| {
            let (i, k) = (row / bins, row % bins);
            let (j, l) = (column / bins, column % bins);
            let entry = |m: usize, k: usize, l: usize| match self.overlap.get(m) {
                Some(lag) => {
                    let distance = (k + self.length - l) % self.length;
                    lag[distance] * Complex64::from_polar(1.0, turn * (l * m) as f64)
                }
                None => Complex64::ZERO,
            };
            if i >= j { entry(i - j, k, l) } else { entry(j - i, l, k).conj() }
        })
    }

    /// Weights with signed multiplicities whose cumulants are those of the whole.
    fn extrapolated(&mut self, transforms: usize, bins: usize) -> Vec<(f64, f64)> {
        let along = |size: usize, size_box: usize| {
            if size <= size_box {
                vec![(size, 1.0)]
            } else {
                let beyond = (size - size_box) as f64;
                vec![(size_box, 1.0 - beyond), (size_box + 1, beyond)]
            }
        };
        let mut measure = Vec::new();
        for (box_transforms, share) in along(transforms, self.transforms_box) {
            for (box_bins, other_share) in along(bins, self.bins_box) {
                let eigenvalues = self.measure(box_transforms, box_bins);
                measure.extend(eigenvalues.iter().map(|weight| (*weight, share * other_share)));
            }
        }
        measure
    }
}

/// A few weights with multiplicities that keep the first `2 NODES` cumulants of `measure`: Gauss
/// quadrature of the measure `weight * multiplicity`, whose mass is the trace. The recurrence
/// coefficients come from Stieltjes' procedure.
fn condense(measure: &[(f64, f64)], trace: f64) -> Vec<(f64, f64)> {
    let unit = measure.iter().map(|m| m.0).fold(0.0, f64::max);
    let points: Vec<(f64, f64)> =
        measure.iter().map(|(weight, count)| (weight / unit, weight * count / trace)).collect();
    let mut before = vec![0.0; points.len()];
    let mut here = vec![1.0; points.len()];
    let (mut diagonal, mut off_diagonal) = (Vec::new(), Vec::new());
    let mut norm_before = 1.0;
    for node in 0..NODES {
        let norm: f64 = points.iter().zip(&here).map(|((_, mass), p)| mass * p * p).sum();
        let step_square = norm / norm_before;
        // The measure has no more to tell: rounding is all that is left.
        if node > 0 && !(step_square > 1e-9 && norm > 0.0) {
            break;
        }
        if node > 0 {
            off_diagonal.push(step_square.sqrt());
        }
        let moment: f64 = points.iter().zip(&here).map(|((x, mass), p)| x * mass * p * p).sum();
        let centre = moment / norm;
        diagonal.push(centre);
        for (((x, _), here), before) in points.iter().zip(&mut here).zip(&mut before) {
            let next = (x - centre) * *here - if node > 0 { step_square } else { 0.0 } * *before;
            *before = *here;
            *here = next;
        }
        norm_before = norm;
    }
    // The smallest nodes can fall below 0, where the signed multiplicities do not carry any
    // further; a leading part of the matrix is the quadrature with fewer nodes.
    (1..=diagonal.len())
        .rev()
        .find_map(|size| quadrature(&diagonal[..size], &off_diagonal[..size - 1]))
        .expect("the mean of positive weights is positive")
        .into_iter()
        .map(|(node, share)| (node * unit, share * trace / (node * unit)))
        .collect()
}

/// Nodes and masses (summing to 1) of the Gauss quadrature with the given recurrence coefficients;
/// `None` where a node is not positive.
fn quadrature(diagonal: &[f64], off_diagonal: &[f64]) -> Option<Vec<(f64, f64)>> {
    let size = diagonal.len();
    let jacobi = DMatrix::from_fn(size, size, |row, column| match row.abs_diff(column) {
        0 => diagonal[row],
        1 => off_diagonal[row.min(column)],
        _ => 0.0,
    });
    let eigen = jacobi.symmetric_eigen();
    let nodes = (0..size).map(|j| (eigen.eigenvalues[j], eigen.eigenvectors[(0, j)].powi(2)));
    let nodes: Vec<(f64, f64)> = nodes.collect();
    nodes.iter().all(|(node, _)| *node > 1e-6).then_some(nodes)
}

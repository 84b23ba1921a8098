//! Threshold and sensitivity when the noise floor is itself an estimate.
//!
//! The test divides a channel's energy by an estimated floor that is independent of it. The
//! energy's distribution is the exact one ([`super::quadratic::GammaSum`]). The floor's is that of
//! `R` reference cells of the channel's own kind, with `R` such that the estimate's variance is
//! right: the same terms, each with `R` times the shape. For one look and `R` cells this is the
//! textbook cell-averaging multiplier `R (pfa^(-1/R) - 1)`; for averaged looks it is the F
//! distribution. A known floor has infinitely many looks.

use super::quadratic::{GammaSum, Term};

/// The ratio that noise alone exceeds with probability `probability`, for a channel's energy of
/// mean 1 and a floor of `looks_floor` equivalent looks.
///
/// # Panics
/// If `looks_floor` is not positive or `probability` not between 0 and 1 (both excluded).
pub fn threshold(energy: &GammaSum, looks_floor: f64, probability: f64) -> f64 {
    assert!(looks_floor > 0.0, "floor looks {looks_floor}");
    if looks_floor.is_infinite() {
        return energy.upper_quantile(probability);
    }
    let floor = floor_of(energy, looks_floor);
    energy.ratio_upper_quantile(&floor, probability, energy.ratio_guess(&floor, probability))
}

/// The floor that as many cells of the channel's kind give as are worth `looks_floor`.
fn floor_of(energy: &GammaSum, looks_floor: f64) -> GammaSum {
    let cells = looks_floor / energy.looks();
    let shared = |t: &Term| Term { scale: t.scale / cells, shape: t.shape * cells };
    GammaSum::new(energy.terms().iter().map(shared).collect())
}

/// The smallest SNR (linear) of a noise-like signal that fills the channel at which the ratio
/// exceeds `threshold` with probability `pd`: the signal scales the channel's energy by `1 + snr`.
///
/// At least 0: a threshold below 1 is met by noise alone.
pub fn required_snr(energy: &GammaSum, looks_floor: f64, threshold: f64, pd: f64) -> f64 {
    let reached = self::threshold(energy, looks_floor, pd);
    (threshold / reached - 1.0).max(0.0)
}

/// Thresholds and required SNR of one channel for any number of floor looks, tabulated once: a
/// dwell then costs two interpolations a channel instead of two root searches.
///
/// Both are smooth in the relative spread `v = sqrt(1 + looks_channel / looks_floor)`; a parabola
/// through three neighbours of their logarithms is good to 1e-4 even for a single look.
#[derive(Clone, Debug, PartialEq)]
pub struct RatioTable {
    energy: GammaSum,
    pfa: f64,
    pd: f64,
    ln_threshold: Vec<f64>,
    ln_reached: Vec<f64>,
}

const NODES: usize = 97;
const SPREAD_MAX: f64 = 4.0;

impl RatioTable {
    /// Tabulates for one channel's energy (mean 1) and one band's error rates.
    pub fn new(energy: GammaSum, pfa: f64, pd: f64) -> RatioTable {
        let tabulate = |probability: f64| {
            let mut table = vec![energy.upper_quantile(probability).ln()];
            for node in 1..NODES {
                let spread = 1.0 + (SPREAD_MAX - 1.0) * node as f64 / (NODES - 1) as f64;
                let floor = floor_of(&energy, energy.looks() / (spread * spread - 1.0));
                // The two nodes before point at this one.
                let start = match table[..] {
                    [.., before, last] => (2.0 * last - before).exp(),
                    _ => energy.ratio_guess(&floor, probability),
                };
                table.push(energy.ratio_upper_quantile(&floor, probability, start).ln());
            }
            table
        };
        let (ln_threshold, ln_reached) = (tabulate(pfa), tabulate(pd));
        RatioTable { energy, pfa, pd, ln_threshold, ln_reached }
    }

    /// The distribution of the channel's energy.
    pub fn energy(&self) -> &GammaSum {
        &self.energy
    }

    /// Threshold (ratio to the estimated floor) and required SNR (linear) at `looks_floor`.
    ///
    /// # Panics
    /// If `looks_floor` is not positive.
    pub fn at(&self, looks_floor: f64) -> (f64, f64) {
        assert!(looks_floor > 0.0, "floor looks {looks_floor}");
        let spread = (1.0 + self.energy.looks() / looks_floor).sqrt();
        if spread > SPREAD_MAX {
            let threshold = threshold(&self.energy, looks_floor, self.pfa);
            return (threshold, required_snr(&self.energy, looks_floor, threshold, self.pd));
        }
        let position = (spread - 1.0) / (SPREAD_MAX - 1.0) * (NODES - 1) as f64;
        let node = (position.round() as usize).clamp(1, NODES - 2);
        let offset = position - node as f64;
        let between = |table: &[f64]| {
            let (before, here, after) = (table[node - 1], table[node], table[node + 1]);
            let slope = 0.5 * (after - before);
            let curvature = 0.5 * (after - 2.0 * here + before);
            (here + offset * (slope + offset * curvature)).exp()
        };
        let threshold = between(&self.ln_threshold);
        (threshold, (threshold / between(&self.ln_reached) - 1.0).max(0.0))
    }
}

//! Threshold and sensitivity when the noise floor is itself an estimate.
//!
//! The test divides a channel's energy (gamma, `looks_channel`) by an estimated floor (gamma to second
//! order, `looks_floor`, independent of it). The ratio follows an F distribution; for one look in the
//! channel and R reference cells of one look it is the textbook cell-averaging multiplier
//! `R (pfa^(-1/R) - 1)`. A known floor has infinitely many looks.

use super::{beta, gamma};

/// The ratio that noise alone exceeds with probability `pfa`.
pub fn threshold(looks_channel: f64, looks_floor: f64, pfa: f64) -> f64 {
    if looks_floor.is_infinite() {
        return gamma::upper_quantile(looks_channel, pfa) / looks_channel;
    }
    beta::ratio_upper_quantile(looks_channel, looks_floor, pfa)
}

/// The smallest SNR (linear) of a noise-like signal that fills the channel at which the ratio exceeds
/// `threshold` with probability `pd`: the signal scales the channel's energy by `1 + snr`.
///
/// At least 0: a threshold below 1 is met by noise alone.
pub fn required_snr(looks_channel: f64, looks_floor: f64, threshold: f64, pd: f64) -> f64 {
    let reached = self::threshold(looks_channel, looks_floor, pd);
    (threshold / reached - 1.0).max(0.0)
}

/// Thresholds and required SNR of one channel for any number of floor looks, tabulated once: a dwell
/// then costs two interpolations a channel instead of two root searches.
///
/// Both are smooth in the relative spread `v = sqrt(1 + looks_channel / looks_floor)`; a parabola
/// through three neighbours of their logarithms is good to 1e-4 even for a single look.
#[derive(Clone, Debug, PartialEq)]
pub struct RatioTable {
    looks_channel: f64,
    pfa: f64,
    pd: f64,
    ln_threshold: Vec<f64>,
    ln_reached: Vec<f64>,
}

const NODES: usize = 65;
const SPREAD_MAX: f64 = 2.0;

impl RatioTable {
    /// Tabulates for one channel's looks and one band's error rates.
    pub fn new(looks_channel: f64, pfa: f64, pd: f64) -> RatioTable {
        let nodes = (0..NODES).map(|node| {
            let spread = 1.0 + (SPREAD_MAX - 1.0) * node as f64 / (NODES - 1) as f64;
            let looks_floor = looks_channel / (spread * spread - 1.0);
            let at = |probability| threshold(looks_channel, looks_floor, probability).ln();
            (at(pfa), at(pd))
        });
        let (ln_threshold, ln_reached) = nodes.unzip();
        RatioTable { looks_channel, pfa, pd, ln_threshold, ln_reached }
    }

    /// Threshold (ratio to the estimated floor) and required SNR (linear) at `looks_floor`.
    ///
    /// # Panics
    /// If `looks_floor` is not positive.
    pub fn at(&self, looks_floor: f64) -> (f64, f64) {
        assert!(looks_floor > 0.0, "floor looks {looks_floor}");
        let spread = (1.0 + self.looks_channel / looks_floor).sqrt();
        if spread > SPREAD_MAX {
            let threshold = threshold(self.looks_channel, looks_floor, self.pfa);
            return (threshold, required_snr(self.looks_channel, looks_floor, threshold, self.pd));
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

//! The arithmetic of an energy detector before there is one: noise, threshold, sensitivity, the
//! averages that a level takes, and the wall below which no averaging helps.
//!
//! Levels of noise and signal are powers in the channel. It must never promise what only a
//! perfectly known floor could hold: an uncertainty of the floor enters on both sides.

use crate::detection::statistics::energy;
use crate::detection::statistics::quadratic::GammaSum;
use crate::detection::statistics::ratio;

/// Boltzmann's constant (J/K), exact in the SI of 2019.
const BOLTZMANN: f64 = 1.380649e-23;

/// The temperature that noise figures refer to (K), as the IEEE defines them.
const REFERENCE_TEMPERATURE_K: f64 = 290.0;

/// Averages beyond this are not asked for: half a day of a 25 kHz channel.
pub const LOOKS_MAX: f64 = 1e9;

/// Up to here the incomplete gamma function is used; beyond, the numerical inversion, whose time
/// does not grow.
const LOOKS_CLOSED_MAX: f64 = 1e5;

/// Noise power `k T B` in a bandwidth, 290 K, raised by the receiver's noise figure (dBm).
pub fn noise_dbm(bandwidth_hz: f64, noise_figure_db: f64) -> f64 {
    decibels(BOLTZMANN * REFERENCE_TEMPERATURE_K * bandwidth_hz * 1e3) + noise_figure_db
}

/// The SNR (linear) at and below which no number of averages detects, for noise known to within
/// plus or minus `uncertainty_db`: `rho - 1/rho` with `rho = 10^(uncertainty_db / 10)`.
///
/// Source: Tandra & Sahai, "SNR walls for signal detection", IEEE J. Sel. Topics Signal Process.
/// 2(1), 2008.
pub fn snr_wall(uncertainty_db: f64) -> f64 {
    let rho = linear(uncertainty_db);
    rho - 1.0 / rho
}

/// The kinds of signal that have a closed form.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Signal {
    /// Complex Gaussian, filling the channel: what the detector's sensitivity is stated for.
    NoiseLike,
    /// Of constant envelope; has a closed form for a known floor only.
    ConstantEnvelope,
}

/// An energy detector for one channel: what is asked of it, and how well it knows the noise.
///
/// The floor is known but for two things: it is estimated from `cells` idle cells of the channel's
/// own kind (infinitely many: not estimated), and it is then off by up to `uncertainty_db` either
/// way. Pfa holds at the highest such noise, Pd at the lowest; SNR is over the nominal noise.
#[derive(Clone, Debug, PartialEq)]
pub struct Radiometer {
    /// Probability that noise alone is detected, at most (0 to 0.5).
    pub pfa: f64,
    /// Probability that a signal is detected, at least (above `pfa`, below 1).
    pub pd: f64,
    /// Idle cells that the floor is estimated from, each averaged as long as the channel; above 0.
    pub cells: f64,
    /// How far the noise may lie from the floor, either way (dB, 0 or more).
    pub uncertainty_db: f64,
}

impl Radiometer {
    /// The highest noise over the nominal floor (linear, 1 or more).
    fn rho(&self) -> f64 {
        linear(self.uncertainty_db)
    }

    /// The ratio to the floor that noise as low as the floor exceeds with a probability.
    fn quantile(&self, looks: f64, probability: f64) -> f64 {
        if self.cells.is_infinite() && looks <= LOOKS_CLOSED_MAX {
            return energy::threshold(looks, probability);
        }
        ratio::threshold(&GammaSum::of_looks(looks), self.cells * looks, probability)
    }

    /// The probability that noise as low as the floor exceeds a ratio to it.
    fn tail(&self, looks: f64, ratio: f64) -> f64 {
        if self.cells.is_infinite() {
            return match looks <= LOOKS_CLOSED_MAX {
                true => energy::false_alarm_probability(looks, ratio),
                false => GammaSum::of_looks(looks).upper_tail(ratio),
            };
        }
        let floor = GammaSum::of_looks(self.cells * looks);
        GammaSum::of_looks(looks).ratio_upper_tail(&floor, ratio)
    }

    /// The threshold as a ratio to the floor, for that many independent looks.
    pub fn threshold(&self, looks: f64) -> f64 {
        self.rho() * self.quantile(looks, self.pfa)
    }

    /// The false-alarm probability at any threshold, at the highest noise.
    pub fn pfa_at(&self, looks: f64, threshold: f64) -> f64 {
        self.tail(looks, threshold / self.rho())
    }

    /// The detection probability of a signal of that SNR (linear) at the detector's threshold and
    /// the lowest noise; `None` where there is no closed form.
    pub fn pd_at(&self, looks: f64, snr: f64, signal: Signal) -> Option<f64> {
        let lowest = 1.0 / self.rho();
        let threshold = self.threshold(looks);
        match signal {
            Signal::NoiseLike => Some(self.tail(looks, threshold / (lowest + snr))),
            Signal::ConstantEnvelope => (self.cells.is_infinite() && looks <= LOOKS_CLOSED_MAX)
                .then(|| {
                    let (threshold, snr) = (threshold / lowest, snr / lowest);
                    energy::detection_probability_constant_envelope(looks, threshold, snr)
                }),
        }
    }

    /// The SNR (linear) at which a noise-like signal is detected with the asked-for probability.
    pub fn required_snr(&self, looks: f64) -> f64 {
        let reached = self.quantile(looks, self.pd);
        (self.threshold(looks) / reached - 1.0 / self.rho()).max(0.0)
    }

    /// The SNR (linear) at which a signal of constant envelope is; `None` as in
    /// [`Radiometer::pd_at`].
    pub fn required_snr_constant_envelope(&self, looks: f64) -> Option<f64> {
        let reaches = |snr: f64| {
            self.pd_at(looks, snr, Signal::ConstantEnvelope).map(|reached| reached >= self.pd)
        };
        let (mut low, mut high) = (0.0, 1.0);
        while !reaches(high)? {
            (low, high) = (high, 2.0 * high);
        }
        while high - low > 1e-12 * high {
            let middle = 0.5 * (low + high);
            if reaches(middle)? { high = middle } else { low = middle }
        }
        Some(high)
    }

    /// The fewest whole looks that detect a noise-like signal of that SNR (linear) as asked; `None`
    /// at or below the wall, and where more than [`LOOKS_MAX`] would be needed.
    pub fn looks_for(&self, snr: f64) -> Option<u64> {
        if snr <= snr_wall(self.uncertainty_db) || self.required_snr(LOOKS_MAX) > snr {
            return None;
        }
        let enough = |looks: u64| self.required_snr(looks as f64) <= snr;
        let mut high = 1;
        while !enough(high) {
            high = (2 * high).min(LOOKS_MAX as u64);
        }
        let mut low = high / 2;
        while high - low > 1 {
            let middle = low + (high - low) / 2;
            if enough(middle) { high = middle } else { low = middle }
        }
        Some(high)
    }
}

/// A power ratio in decibels.
pub fn decibels(ratio: f64) -> f64 {
    10.0 * ratio.log10()
}

/// A power ratio from decibels.
pub fn linear(decibels: f64) -> f64 {
    10f64.powf(decibels / 10.0)
}

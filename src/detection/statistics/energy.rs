//! The energy detector with a known noise floor: closed forms for threshold and error rates.
//!
//! `looks` is the number of independent complex values averaged (or the equivalent number, see
//! [`super::weights`]); a threshold is a ratio to the mean noise power; SNR is signal over noise
//! power.

use super::gamma;
use super::marcum::generalised_q;

/// False-alarm probability at a threshold: `Q(looks, looks * threshold)`.
///
/// Source: Urkowitz, "Energy detection of unknown deterministic signals", Proc. IEEE 55, 1967.
pub fn false_alarm_probability(looks: f64, threshold: f64) -> f64 {
    gamma::upper_tail(looks, looks * threshold)
}

/// The threshold that noise alone exceeds with probability `pfa`.
pub fn threshold(looks: f64, pfa: f64) -> f64 {
    gamma::upper_quantile(looks, pfa) / looks
}

/// Detection probability for a noise-like (complex Gaussian) signal: the noise's own tail, scaled.
pub fn detection_probability_noise_like(looks: f64, threshold: f64, snr: f64) -> f64 {
    gamma::upper_tail(looks, looks * threshold / (1.0 + snr))
}

/// Detection probability for a signal of constant envelope: `Q_looks(sqrt(2 looks snr), sqrt(2
/// looks threshold))`.
///
/// Source: Digham, Alouini & Simon, "On the energy detection of unknown signals over fading
/// channels", IEEE Trans. Commun. 55, 2007.
pub fn detection_probability_constant_envelope(looks: f64, threshold: f64, snr: f64) -> f64 {
    generalised_q(looks, (2.0 * looks * snr).sqrt(), (2.0 * looks * threshold).sqrt())
}

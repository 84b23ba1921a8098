//! The normal distribution's upper tail and its inverse.

/// Probability that a standard normal variate exceeds `z`.
pub fn upper_tail(z: f64) -> f64 {
    0.5 * libm::erfc(z * std::f64::consts::FRAC_1_SQRT_2)
}

/// The deviate that a standard normal variate exceeds with the given probability.
///
/// Newton's method on the logarithm of the tail from a crude start; full double precision.
///
/// # Panics
/// If `probability` is not between 0 and 1 (both excluded).
pub fn upper_quantile(probability: f64) -> f64 {
    assert!(probability > 0.0 && probability < 1.0, "a probability, got {probability}");
    if probability > 0.5 {
        return -upper_quantile(1.0 - probability);
    }
    let mut z = (-2.0 * probability.ln()).sqrt().min(38.0) * 0.9;
    for _ in 0..100 {
        let tail = upper_tail(z);
        let density = (-0.5 * z * z).exp() / std::f64::consts::TAU.sqrt();
        let step = (tail / probability).ln() * tail / density;
        z += step;
        if step.abs() < 1e-15 * z.abs().max(1.0) {
            break;
        }
    }
    z
}

//! Confidence intervals for a proportion.

use super::{beta, normal, solve_upper_tail};

/// Wilson's score interval for `hits` out of `trials` at the given confidence (0 to 1).
///
/// Source: NIST/SEMATECH e-Handbook of Statistical Methods, section 7.2.4.1.
pub fn wilson(hits: u64, trials: u64, confidence: f64) -> (f64, f64) {
    assert!(hits <= trials && trials > 0, "{hits} of {trials}");
    let (n, share) = (trials as f64, hits as f64 / trials as f64);
    let z = normal::upper_quantile(0.5 * (1.0 - confidence));
    let middle = share + z * z / (2.0 * n);
    let half = z * (share * (1.0 - share) / n + z * z / (4.0 * n * n)).sqrt();
    let scale = 1.0 + z * z / n;
    (((middle - half) / scale).max(0.0), ((middle + half) / scale).min(1.0))
}

/// The exact (Clopper-Pearson) interval for `hits` out of `trials` at the given confidence (0 to
/// 1).
///
/// Source: NIST/SEMATECH e-Handbook of Statistical Methods, section 7.2.4.2.
pub fn clopper_pearson(hits: u64, trials: u64, confidence: f64) -> (f64, f64) {
    assert!(hits <= trials && trials > 0, "{hits} of {trials}");
    let (k, n) = (hits as f64, trials as f64);
    let tail = 0.5 * (1.0 - confidence);
    // Odds that leave `probability` of a beta(a, b) variate above them; odds map (0, 1) to (0,
    // inf).
    let beta_upper_quantile = |a: f64, b: f64, probability: f64| {
        let odds = solve_upper_tail(probability, a / b, |odds| {
            let step = 1e-6 * odds;
            let above = |odds: f64| beta::regularised(b, a, 1.0 / (1.0 + odds));
            (above(odds), (above(odds - step) - above(odds + step)) / (2.0 * step))
        });
        odds / (1.0 + odds)
    };
    let low = if hits == 0 { 0.0 } else { beta_upper_quantile(k, n - k + 1.0, 1.0 - tail) };
    let high = if hits == trials { 1.0 } else { beta_upper_quantile(k + 1.0, n - k, tail) };
    (low, high)
}

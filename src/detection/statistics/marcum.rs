//! Marcum's Q function: the tail of a non-central chi-square.

use super::gamma::{deviance, stirling_error, upper_tail};

/// Generalised Marcum Q function `Q_m(a, b)` of any real order `m > 0`, for `a, b >= 0`: a mixture
/// of gamma tails with Poisson weights, `sum_k Poisson(k; a^2/2) Q(m + k, b^2/2)`.
///
/// The sum runs over the weights that matter, upwards, so that each gamma tail follows from the one
/// before by adding a positive term.
pub fn generalised_q(order: f64, a: f64, b: f64) -> f64 {
    assert!(order > 0.0 && a >= 0.0 && b >= 0.0, "Q_{order}({a}, {b})");
    let (mean, x) = (0.5 * a * a, 0.5 * b * b);
    if mean == 0.0 || x == 0.0 {
        return upper_tail(order, x);
    }
    // 20 standard deviations and 20 counts either side hold all but some 1e-85 of the weight, and
    // the first weight stays within the range of a double.
    let reach = 20.0 * (mean.sqrt() + 1.0);
    let first = (mean - reach).floor().max(0.0);
    let last = (mean + reach).ceil();
    let mut tail = upper_tail(order + first, x);
    let mut increment = poisson(order + first, x);
    let mut weight = poisson(first, mean);
    let mut sum = 0.0;
    let mut k = first;
    while k <= last {
        sum += weight * tail;
        tail = (tail + increment).min(1.0);
        increment *= x / (order + k + 1.0);
        k += 1.0;
        weight *= mean / k;
    }
    sum.min(1.0)
}

/// `m^k e^-m / Gamma(k + 1)` for real `k >= 0`.
fn poisson(k: f64, mean: f64) -> f64 {
    if k == 0.0 {
        return (-mean).exp();
    }
    (-stirling_error(k) - deviance(k, mean)).exp() / (std::f64::consts::TAU * k).sqrt()
}

//! The incomplete beta function, and with it the ratio of two gamma variates (F distribution).

use super::gamma::{deviance, stirling_error, wilson_hilferty};
use super::{normal, solve_upper_tail};

/// `x^a (1-x)^b / B(a, b)`, from Stirling's errors and deviances so that large shapes keep
/// precision.
fn common_factor(a: f64, b: f64, x: f64, complement: f64) -> f64 {
    let n = a + b;
    let exponent = stirling_error(n)
        - stirling_error(a)
        - stirling_error(b)
        - deviance(a, n * x)
        - deviance(b, n * complement);
    exponent.exp() * (a * b / (std::f64::consts::TAU * n)).sqrt()
}

/// The regularised incomplete beta function I_x(a, b) for `a, b > 0` and `0 <= x <= 1`.
///
/// # Panics
/// If an argument is outside its range.
pub fn regularised(a: f64, b: f64, x: f64) -> f64 {
    assert!(a > 0.0 && b > 0.0 && (0.0..=1.0).contains(&x), "I_{x}({a}, {b})");
    with_complement(a, b, x, 1.0 - x)
}

/// As [`regularised`], with `1 - x` given apart so that neither end loses digits.
fn with_complement(a: f64, b: f64, x: f64, complement: f64) -> f64 {
    if x <= 0.0 {
        0.0
    } else if complement <= 0.0 {
        1.0
    } else if x <= (a + 1.0) / (a + b + 2.0) {
        common_factor(a, b, x, complement) / a * continued_fraction(a, b, x)
    } else {
        1.0 - common_factor(a, b, x, complement) / b * continued_fraction(b, a, complement)
    }
}

/// Lentz's continued fraction for I_x(a, b) without its factor; converges in O(sqrt(max(a, b)))
/// steps.
fn continued_fraction(a: f64, b: f64, x: f64) -> f64 {
    const TINY: f64 = 1e-300;
    let guard = |value: f64| if value.abs() < TINY { TINY } else { value };
    let mut c = 1.0;
    let mut d = 1.0 / guard(1.0 - (a + b) * x / (a + 1.0));
    let mut h = d;
    for m in 1..100_000 {
        let m = m as f64;
        let even = m * (b - m) * x / ((a + 2.0 * m - 1.0) * (a + 2.0 * m));
        d = 1.0 / guard(1.0 + even * d);
        c = guard(1.0 + even / c);
        h *= d * c;
        let odd = -(a + m) * (a + b + m) * x / ((a + 2.0 * m) * (a + 2.0 * m + 1.0));
        d = 1.0 / guard(1.0 + odd * d);
        c = guard(1.0 + odd / c);
        let factor = d * c;
        h *= factor;
        if (factor - 1.0).abs() < 1e-16 {
            break;
        }
    }
    h
}

/// Probability that the ratio of two independent gamma variates of mean 1, with the given shapes
/// above and below the line, exceeds `ratio` (upper tail of F with `2 * shape` degrees of freedom
/// each).
///
/// # Panics
/// If a shape or the ratio is not positive.
pub fn ratio_upper_tail(shape_above: f64, shape_below: f64, ratio: f64) -> f64 {
    assert!(ratio > 0.0, "ratio {ratio}");
    let scaled = shape_above * ratio;
    let sum = shape_below + scaled;
    with_complement(shape_below, shape_above, shape_below / sum, scaled / sum)
}

/// The ratio that is exceeded with the given probability: inverse of [`ratio_upper_tail`].
///
/// # Panics
/// If a shape is not positive or `probability` is not between 0 and 1 (both excluded).
pub fn ratio_upper_quantile(shape_above: f64, shape_below: f64, probability: f64) -> f64 {
    // Start: the gamma quantile for the two variances together.
    let shape = 1.0 / (1.0 / shape_above + 1.0 / shape_below);
    let start = wilson_hilferty(shape, normal::upper_quantile(probability)).max(1e-3);
    solve_upper_tail(probability, start, |ratio| {
        let scaled = shape_above * ratio;
        let sum = shape_below + scaled;
        let density =
            common_factor(shape_below, shape_above, shape_below / sum, scaled / sum) / ratio;
        (ratio_upper_tail(shape_above, shape_below, ratio), density)
    })
}

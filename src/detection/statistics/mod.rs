//! Distributions behind the decisions: tails, quantiles, equivalent looks, intervals.
//!
//! All are pure functions of doubles. Upper tails are computed as such, never as one minus the
//! lower tail, so that a false-alarm probability of 1e-9 has as many good digits as one of 1e-1.

pub mod beta;
pub mod energy;
pub mod gamma;
pub mod interval;
pub mod marcum;
pub mod normal;
pub mod quadratic;
pub mod ratio;
pub mod weights;

/// Solves `ln tail(x) = ln target` for a tail that falls with `x`, by Newton steps on the logarithm
/// kept inside a shrinking bracket.
///
/// `tail` returns the upper tail probability and the density at `x > 0`. `start` is any guess. The
/// logarithm of a tail is nearly quadratic, so a handful of steps reaches full precision.
pub(crate) fn solve_upper_tail(target: f64, start: f64, tail: impl Fn(f64) -> (f64, f64)) -> f64 {
    assert!(target > 0.0 && target < 1.0, "a probability between 0 and 1, got {target}");
    let (mut low, mut high) = (0.0_f64, f64::INFINITY);
    let mut x = if start.is_finite() && start > 0.0 { start } else { 1.0 };
    for _ in 0..200 {
        let (probability, density) = tail(x);
        if probability > target {
            low = x;
        } else {
            high = x;
        }
        // Where more than half lies above, the lower tail is the small one: step on it instead.
        let step = if target > 0.5 {
            (probability - target) / density
        } else {
            (probability / target).ln() * probability / density
        };
        let mut next = x + step;
        if !(next > low && next < high) {
            next = if high.is_finite() { 0.5 * (low + high) } else { 2.0 * x };
        }
        if (next - x).abs() <= 1e-13 * x {
            return next;
        }
        x = next;
    }
    x
}

//! How many independent looks an average of windowed, overlapped transforms is worth.

use num_complex::Complex64;
use rustfft::FftPlanner;

/// Correlations between the powers of any two cells of the time-frequency plane, for white noise.
///
/// For transforms `m` hops apart and bins `d` apart, the correlation of the complex values is
/// `sum_n w(n) w(n + m hop) e^(-2 pi i d n / N) / sum_n w(n)^2`, and that of the powers its squared
/// magnitude (the values are jointly Gaussian).
///
/// Source: Welch, "The use of fast Fourier transform for the estimation of power spectra", IEEE Trans.
/// Audio Electroacoust. 15, 1967, for `d = 0`; the frequency lag is the same sum with its phase kept.
#[derive(Clone, Debug)]
pub struct PowerCorrelation {
    /// `lags[m][d]`, hops `m` from 0 up to where windows no longer meet, bins `d` from 0 to N/2.
    lags: Vec<Vec<f64>>,
}

impl PowerCorrelation {
    /// For window values of one transform and the hop between transforms (samples).
    ///
    /// # Panics
    /// If the hop is 0 or the window is empty.
    pub fn new(window: &[f64], hop: usize) -> PowerCorrelation {
        assert!(hop > 0 && !window.is_empty(), "hop {hop}, window {}", window.len());
        let length = window.len();
        let energy: f64 = window.iter().map(|w| w * w).sum();
        let transform = FftPlanner::new().plan_fft_forward(length);
        let lags = (0..length)
            .step_by(hop)
            .map(|shift| {
                let mut product: Vec<Complex64> = (0..length)
                    .map(|n| window[n] * window.get(n + shift).copied().unwrap_or(0.0))
                    .map(Complex64::from)
                    .collect();
                transform.process(&mut product);
                let half = &product[..length / 2 + 1];
                half.iter().map(|value| (value / energy).norm_sqr()).collect()
            })
            .collect();
        PowerCorrelation { lags }
    }

    /// Equivalent independent looks of a weighted sum over bins, averaged over `segments` transforms:
    /// the squared mean over the variance of that energy for white noise.
    ///
    /// # Panics
    /// If there are no segments or the weights sum to 0.
    pub fn equivalent_looks(&self, segments: usize, bin_weights: &[f64]) -> f64 {
        let total: f64 = bin_weights.iter().sum();
        assert!(segments > 0 && total > 0.0, "{segments} segments, weight {total}");
        let count = segments as f64;
        let weight_products = |distance: usize| -> f64 {
            bin_weights.iter().zip(&bin_weights[distance..]).map(|(a, b)| a * b).sum()
        };
        let mut variance = 0.0;
        for distance in 0..bin_weights.len().min(self.lags[0].len()) {
            let products = weight_products(distance) * if distance == 0 { 1.0 } else { 2.0 };
            let over_time: f64 = self
                .lags
                .iter()
                .enumerate()
                .take(segments)
                .map(|(m, by_bin)| {
                    let both_signs = if m == 0 { 1.0 } else { 2.0 };
                    both_signs * (1.0 - m as f64 / count) * by_bin[distance]
                })
                .sum();
            variance += products * over_time / count;
        }
        total * total / variance
    }
}

//! Samples to power spectra: windowed transforms, squared magnitude, buffers reused.

use std::sync::Arc;

use num_complex::Complex32;
use rustfft::{Fft, FftPlanner};

use super::window::Window;

/// Windowed transform of a fixed length. Owns its plan, its window and its scratch; nothing is
/// allocated after construction.
pub struct Spectrum {
    transform: Arc<dyn Fft<f32>>,
    /// Window values divided by `sqrt(N sum w^2)`, so that the bins of white noise sum to its
    /// power.
    taper: Vec<f32>,
    buffer: Vec<Complex32>,
    scratch: Vec<Complex32>,
}

impl Spectrum {
    /// For transforms of `length` samples under `window`.
    pub fn new(window: Window, length: usize) -> Spectrum {
        let values = window.values(length);
        let energy: f64 = values.iter().map(|w| w * w).sum();
        let scale = 1.0 / (length as f64 * energy).sqrt();
        let transform = FftPlanner::new().plan_fft_forward(length);
        Spectrum {
            taper: values.iter().map(|w| (w * scale) as f32).collect(),
            buffer: vec![Complex32::default(); length],
            scratch: vec![Complex32::default(); transform.get_inplace_scratch_len()],
            transform,
        }
    }

    /// Transform length (samples).
    pub fn length(&self) -> usize {
        self.taper.len()
    }

    /// Adds the power spectrum of one transform's samples to `power`, in the transform's own order
    /// (DC first).
    ///
    /// # Panics
    /// If `samples` or `power` is not as long as the transform.
    pub fn accumulate(&mut self, samples: &[Complex32], power: &mut [f32]) {
        assert_eq!(samples.len(), self.taper.len(), "samples of one transform");
        assert_eq!(power.len(), self.taper.len(), "one power per bin");
        for ((value, sample), taper) in self.buffer.iter_mut().zip(samples).zip(&self.taper) {
            *value = sample * taper;
        }
        self.transform.process_with_scratch(&mut self.buffer, &mut self.scratch);
        for (sum, value) in power.iter_mut().zip(&self.buffer) {
            *sum += value.norm_sqr();
        }
    }
}

/// Copies a spectrum in the transform's order (DC first) to rising frequency (DC at `N/2`), scaled.
///
/// # Panics
/// If the two differ in length.
pub fn to_rising_frequency(power: &[f32], scale: f32, rising: &mut [f32]) {
    assert_eq!(power.len(), rising.len(), "two spectra of one length");
    let half = power.len() / 2;
    let (negative, positive) = rising.split_at_mut(half);
    for (to, from) in negative.iter_mut().zip(&power[power.len() - half..]) {
        *to = from * scale;
    }
    for (to, from) in positive.iter_mut().zip(power) {
        *to = from * scale;
    }
}

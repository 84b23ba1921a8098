//! Tapers for the transform, and the few numbers that follow from them.

/// A taper. Both are periodic (DFT-even): the sum that the transform sees has no repeated end
/// point.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Window {
    /// Hann, raised cosine: narrow main lobe, side lobes from -31 dB falling at 18 dB an octave.
    Hann,
    /// Minimum 4-term Blackman-Harris: side lobes below -92 dB, for bands with strong neighbours.
    BlackmanHarris,
}

impl Window {
    /// Cosine coefficients a0, a1, ... of `sum (-1)^k a_k cos(2 pi k n / N)`.
    ///
    /// Source: Harris, "On the use of windows for harmonic analysis with the discrete Fourier
    /// transform", Proc. IEEE 66(1), 1978.
    fn coefficients(self) -> &'static [f64] {
        match self {
            Window::Hann => &[0.5, 0.5],
            Window::BlackmanHarris => &[0.35875, 0.48829, 0.14128, 0.01168],
        }
    }

    /// Half the width of the main lobe, null to centre (bins): what a carrier spreads over.
    pub fn main_lobe_half_width_bins(self) -> usize {
        self.coefficients().len()
    }

    /// The window's values, periodic, peak 1 [`length` values].
    pub fn values(self, length: usize) -> Vec<f64> {
        let step = std::f64::consts::TAU / length as f64;
        (0..length)
            .map(|n| {
                self.coefficients().iter().enumerate().fold(0.0, |sum, (k, a)| {
                    let sign = if k % 2 == 0 { 1.0 } else { -1.0 };
                    sum + sign * a * (step * (k * n % length) as f64).cos()
                })
            })
            .collect()
    }

    /// The word used in a configuration.
    pub fn as_str(self) -> &'static str {
        match self {
            Window::Hann => "hann",
            Window::BlackmanHarris => "blackman_harris",
        }
    }
}
